"""The whole job over REST alone: real HTTP, a real web server, a real worker."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Iterator
from typing import Any

import httpx
import numpy as np
import pyarrow.parquet as pq
import pytest

from kinetics_db.accounts.models import IdempotencyKey
from kinetics_db.evidence.models import ModelEvidence
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.jobs.models import Job
from kinetics_db.provenance.selectors import chain_breaks
from kinetics_db.runs.models import Run, RunRevision
from tests.factories.people import make_user
from tests.factories.tokens import make_token
from tests.flows.rest_client import RestClient, all_at_once
from tests.flows.test_alpha_pinene import FILE, NAMES, PUBLISHED, TEXT

pytestmark = [pytest.mark.processes, pytest.mark.django_db(transaction=True)]

Start = Callable[..., Any]
K, SIGMA = 0.01, 5e-5
"""Of the invented runs: 1/s, and the noise in mol/L."""
MANY = 20

# 1e-5 per minute: the unweighted optimum of the published data, recomputed outside this project with matrix
# exponentials; rounded, it is what Box et al. (Technometrics 15 (1973) 33) give.
OPTIMUM = {"k_1": 5.92584877, "k_2": 2.96340211, "k_3": 2.04728402, "k_4": 27.446793, "k_5": 3.99794989}
RESIDUAL_SUM = 19.872166934


@pytest.fixture
def server(web_server_process: Start) -> str:
    return str(web_server_process()[1])


@pytest.fixture
def script(server: str) -> Iterator[RestClient]:
    """A script of somebody who begins with nothing but a token."""
    client = RestClient(server, make_token(make_user("mira"), scope="write")[1])
    yield client
    client.close()


def measured(start: float, *, seed: int) -> dict[str, list[float]]:
    """An invented run of ester -> alcohol, in mol/L."""
    times = np.linspace(0.0, 3.0 / K, 12)
    noise = np.random.default_rng(seed).normal(0.0, SIGMA, (2, times.size))
    ester = start * np.exp(-K * times)
    return {
        "t": times.tolist(),
        "ester": (ester + noise[0]).tolist(),
        "alcohol": (start - ester + noise[1]).tolist(),
    }


def as_file(numbers: dict[str, list[float]]) -> bytes:
    """What an instrument would write, every digit of it."""
    rows = ["t / s,I_1 / mol/L,I_2 / mol/L"]
    rows += [",".join(map(repr, row)) for row in zip(*numbers.values(), strict=True)]
    return ("\n".join(rows) + "\n").encode()


def amount(value: float, unit: str, uncertainty: float = 0.0) -> dict[str, Any]:
    return {"value": value, "unit": unit, "uncertainty": uncertainty}


def run_entry(code: str, millilitres: float, **more: Any) -> dict[str, Any]:
    return {
        "project": "hydrolysis",
        "code": code,
        "charges": [{"stock": "ester A", "amount": amount(millilitres, "mL", 0.002)}],
        "total_volume": amount(10.0, "mL", 0.01),
        "temperature": amount(40.0, "degC", 0.1),
        **more,
    }


RECIPE = {
    "kind": "as reported",
    "columns": [{"signal": "I_1", "species": "ester"}, {"signal": "I_2", "species": "alcohol"}],
    "constant_u": SIGMA,
}


def cupboard(script: RestClient) -> None:
    """A project, its compounds, a lot, a stock of 0.1 mol/L."""
    script.post("projects/", {"slug": "hydrolysis", "name": "Hydrolysis of an ester"})
    for name in ("ester", "alcohol"):
        script.post("projects/hydrolysis/compounds/", {"name": name, "molar_mass": 100.0})
    script.post("projects/hydrolysis/lots/", {"code": "E-1", "compound": "ester", "purity": 1.0})
    portions = [{"lot": "E-1", "amount": amount(1.0, "g", 0.001)}]
    stock = {"code": "ester A", "portions": portions, "volume": amount(100.0, "mL", 0.1)}
    made = script.post("projects/hydrolysis/stocks/", stock).json()
    assert made["components"][0]["concentration"]["value"] == pytest.approx(0.1)


def test_the_whole_job_is_done_over_rest_alone(script: RestClient, celery_worker_process: Start) -> None:
    cupboard(script)
    runs = [run_logged_and_corrected(script), script.post("runs/", run_entry("K02", 2.0)).json()["id"]]
    numbers = {run: measured(start, seed=run) for run, start in zip(runs, (0.01, 0.02), strict=True)}
    tables = [table_of_a_file(script, run, numbers[run]) for run in runs]
    version = mechanism_after_a_mistake(script)
    body = {"project": "hydrolysis", "name": "both", "tables": tables}
    dataset = script.post("datasets/", body).json()["id"]
    for run, table in zip(runs, tables, strict=True):
        every_form_is_what_was_uploaded(script, table, numbers[run])
    tidy_table_is_what_was_uploaded(script, dataset, [numbers[run] for run in runs])
    location = fit_that_waits(script, dataset, version)
    worker = celery_worker_process(concurrency=1)
    fit = script.ended(location)
    assert fit["state"] == "done", (fit["message"], worker.log())
    result_is_right(script, fit, runs)
    assert chain_breaks() == []


def run_logged_and_corrected(script: RestClient) -> int:
    """A run whose volume is mended with If-Match; who comes second with the same state is refused."""
    run = script.post("runs/", run_entry("K01", 7.0), Idempotency_Key="K01")
    read = script.get(run.headers["Location"])
    assert read.json() == run.json() and read.headers["ETag"] == run.headers["ETag"]
    path, changes = run.headers["Location"], {"charges": run_entry("K01", 1.0)["charges"]}
    script.patch(path, changes, 428)
    mended = script.patch(path, {**changes, "reason": "misread"}, If_Match=read.headers["ETag"])
    assert mended.json()["start"][0]["concentration"]["value"] == pytest.approx(0.01)
    refused = script.patch(path, {"notes": "also mine"}, 412, If_Match=read.headers["ETag"])
    assert "changed since you read it" in refused.json()["detail"]
    script.get(path, 304, If_None_Match=mended.headers["ETag"])
    assert [r["number"] for r in script.everything(f"{path}revisions/?size=1")] == [2, 1]
    return int(run.json()["id"])


def table_of_a_file(script: RestClient, run: int, numbers: dict[str, list[float]]) -> int:
    """A file that is looked at, stored and reduced; each twice, which makes nothing twice."""
    path, data = f"runs/{run}/files/", as_file(numbers)
    seen = script.upload(path, f"{run}.csv", data, 200).json()
    assert seen["rows"] == 12 and [c["unit"] for c in seen["columns"]] == ["s", "mol/L", "mol/L"]
    assert script.everything(path) == []
    stored = script.upload(f"{path}?store=true", f"{run}.csv", data)
    again = script.upload(f"{path}?store=true", f"{run}.csv", data, 200)
    assert again.headers["Location"] == stored.headers["Location"]
    content = script.get(f"files/{stored.json()['file']}/content/")
    assert content.content == data and "immutable" in content.headers["Cache-Control"]
    signals = stored.json()["signal_table"]
    body = {"signal_table": signals, "name": "as reported", "recipe": RECIPE}
    tried = script.post(f"runs/{run}/tables/?preview=true", body, 200).json()
    assert tried["first_rows"][1][1] == numbers["ester"][1]
    table = script.post(f"runs/{run}/tables/", body)
    assert script.post(f"runs/{run}/tables/", body, 200).json() == table.json()
    return int(table.json()["id"])


def mechanism_after_a_mistake(script: RestClient) -> int:
    """A text whose mistake is shown with its place before the text is right."""
    text = "# one step\nester --k- alcohol\n"
    (mistake,) = script.post("mechanisms/check/", {"text": text}, 200).json()["problems"]
    assert mistake["line"] == 2 and mistake["column"] >= 1 and mistake["message"]
    body = {"project": "hydrolysis", "name": "one step", "text": text}
    assert script.post("mechanisms/", body, 422).json()["problems"][0]["line"] == 2
    body["text"] = text.replace("--k-", "--k-->")
    checked = script.post("mechanisms/check/", {"text": body["text"]}, 200).json()
    assert checked["valid"] and checked["problems"] == []
    version = script.post("mechanisms/", body)
    as_text = script.get(version.headers["Location"], Accept="text/plain")
    assert as_text.text == body["text"] and as_text.headers["Content-Type"].startswith("text/plain")
    return int(version.json()["id"])


def every_form_is_what_was_uploaded(script: RestClient, table: int, numbers: dict[str, list[float]]) -> None:
    """JSON, CSV and Parquet hold the same doubles as the file, to the last digit."""
    as_json = {c["name"]: c for c in script.get(f"tables/{table}.json").json()["columns"]}
    answer = script.get(f"tables/{table}.csv")
    rows = list(csv.reader(io.StringIO(answer.text)))
    parquet = pq.read_table(io.BytesIO(script.get(f"tables/{table}.parquet").content))
    names = list(as_json)
    assert parquet.column_names == names and [len(rows), len(rows[0])] == [13, len(names)]
    for name, key in {"t": "t", "ester": "ester", "alcohol": "alcohol"}.items():
        (at,) = [i for i, found in enumerate(names) if found in (name, f"{name}_s")]
        assert as_json[names[at]]["values"] == numbers[key]
        assert parquet.column(at).to_pylist() == numbers[key]
        assert [float(row[at]) for row in rows[1:]] == numbers[key]
    script.get(f"tables/{table}.csv", 304, If_None_Match=answer.headers["ETag"])
    assert script.get(f"tables/{table}/", Accept="text/csv").text == answer.text


def tidy_table_is_what_was_uploaded(
    script: RestClient, dataset: int, numbers: list[dict[str, list[float]]]
) -> None:
    expected = [
        (run, t, name, value)
        for run, one in zip(("K01", "K02"), numbers, strict=True)
        for name in ("ester", "alcohol")
        for t, value in zip(one["t"], one[name], strict=True)
    ]
    path = f"datasets/{dataset}/table"
    parquet = pq.read_table(io.BytesIO(script.get(f"{path}.parquet").content)).to_pylist()
    lines = list(csv.DictReader(io.StringIO(script.get(f"{path}.csv").text)))
    columns = script.get(f"{path}.json").json()["columns"]
    as_json = [dict(zip([c["name"] for c in columns], row, strict=True))
               for row in zip(*(c["values"] for c in columns), strict=True)]  # fmt: skip
    for found in (parquet, as_json, lines):
        rows = [(r["run"], float(r["time_s"]), r["column"], float(r["value"])) for r in found]
        assert sorted(rows) == sorted(expected)
        assert {(float(r["standard_uncertainty"]), r["unit"]) for r in found} == {(SIGMA, "mol/L")}


def fit_that_waits(script: RestClient, dataset: int, version: int) -> str:
    """A question made from what the server proposes; while nobody works on it, asking again costs a 304."""
    proposed = script.get(f"fits/propose/?dataset={dataset}&mechanism_version={version}").json()
    assert proposed["constants"] == [{"name": "k", "unit": "1/s"}]
    assert proposed["undecided"] == {"compounds": [], "columns": []}
    question = {name: proposed[name] for name in ("dataset", "mechanism_version", "casting", "settings")}
    asked = script.post("fits/", {**question, "constants": [{"name": "k", "start": 0.05}]}, 202)
    waiting = script.get(asked.headers["Location"])
    assert waiting.json()["state"] == "waiting" and int(waiting.headers["Retry-After"]) > 0
    same = script.get(asked.headers["Location"], 304, If_None_Match=waiting.headers["ETag"])
    assert int(same.headers["Retry-After"]) > 0 and same.content == b""
    script.get(f"{asked.headers['Location']}curves/", 404)
    return asked.headers["Location"]


def result_is_right(script: RestClient, fit: dict[str, Any], runs: list[int]) -> None:
    (k,) = fit["result"]["constants"]
    assert fit["result"]["status"] == "converged" and k["determined"] and k["unit"] == "1/s"
    assert abs(k["value"] - K) < 4 * k["standard_error"] < 0.02 * K
    curves = script.get(fit["links"]["curves"]).json()
    assert [one["run"] for one in curves["runs"]] == runs and curves["unit"] == "mol/L"
    assert len(curves["runs"][0]["curve"]["times"]) > 12
    evidence = script.get(fit["links"]["evidence"]).json()
    assert len(evidence["runs"]) == 2 and {one["verdict"] for one in evidence["runs"]} == {"agrees"}
    grid = script.get("evidence/?project=hydrolysis").json()
    assert {row["code"]: row["cells"][0]["verdict"] for row in grid["items"]} == {
        "K01": "agrees",
        "K02": "agrees",
    }
    (line,) = script.everything("fits/?project=hydrolysis&state=done")
    assert line["id"] == fit["id"] and line["verdicts"] == {"agrees": 2}


def test_the_published_optimum_is_reached_over_rest_alone(
    script: RestClient, celery_worker_process: Start
) -> None:
    celery_worker_process(concurrency=1)
    script.post("projects/", {"slug": "isomers", "name": "Thermal isomerisation"})
    script.post("projects/isomers/compounds/", {"name": "alpha-pinene"})
    charge = {"compound": "alpha-pinene", "amount": amount(100.0, "%")}
    run = script.post("runs/", {"project": "isomers", "code": "1947", "charges": [charge]}).json()["id"]
    stored = script.upload(f"runs/{run}/files/?store=true", "1947.csv", FILE.encode()).json()
    recipe = {"kind": "as reported", "columns": [{"signal": name, "species": name} for name in NAMES]}
    body = {"signal_table": stored["signal_table"], "name": "as reported", "recipe": recipe}
    table = script.post(f"runs/{run}/tables/", body).json()["id"]
    dataset = script.post("datasets/", {"project": "isomers", "name": "published", "tables": [table]}).json()
    version = script.post("mechanisms/", {"project": "isomers", "name": "isomerisation", "text": TEXT}).json()
    question = {
        "dataset": dataset["id"],
        "mechanism_version": version["id"],
        "constants": [{"name": name, "start": 1e-6} for name in PUBLISHED],
        "settings": {"error_model": "one sigma", "starts": 1, "rtol": 1e-9},
    }
    fit = script.ended(script.post("fits/", question, 202).headers["Location"])
    result = fit["result"]
    assert (fit["state"], result["status"]) == ("done", "converged"), fit["message"]
    found = {one["name"]: one["value"] * 60 * 1e5 for one in result["constants"]}
    assert found == pytest.approx(OPTIMUM, rel=1e-4)
    assert found == pytest.approx(PUBLISHED, rel=1e-3)
    curves = script.get(fit["links"]["curves"]).json()["runs"][0]["points"]
    residuals = np.subtract(curves["observed"], curves["model"])
    assert np.sum(residuals**2) == pytest.approx(RESIDUAL_SUM, rel=1e-6)


def question_of(script: RestClient) -> dict[str, Any]:
    """A question about one run that has all it needs."""
    cupboard(script)
    run = script.post("runs/", run_entry("K01", 1.0)).json()["id"]
    table = table_of_a_file(script, run, measured(0.01, seed=1))
    dataset = script.post("datasets/", {"project": "hydrolysis", "name": "one", "tables": [table]}).json()
    version = mechanism_after_a_mistake(script)
    constants = [{"name": "k", "start": 0.02}]
    return {"dataset": dataset["id"], "mechanism_version": version, "constants": constants}


def sent_at_once(scripts: list[RestClient], path: str, body: object, **headers: str) -> list[httpx.Response]:
    """The same POST many times at one moment, by turns to each server."""
    return all_at_once(MANY, lambda i: scripts[i % len(scripts)].http.post(path, json=body, headers=headers))


@pytest.fixture
def scripts(script: RestClient, web_server_process: Start) -> Iterator[list[RestClient]]:
    """The same person at two web servers."""
    other = RestClient(web_server_process()[1], script.secret)
    yield [script, other]
    other.close()


def test_a_fit_that_twenty_ask_for_at_once_is_one_fit_with_one_result(
    scripts: list[RestClient], celery_worker_process: Start
) -> None:
    question = question_of(scripts[0])
    plain = sent_at_once(scripts, "fits/", question)
    keyed = sent_at_once(scripts, "fits/", question, **{"Idempotency-Key": "the-same"})
    answers = [*plain, *keyed]
    assert {answer.status_code for answer in answers} == {202}
    (location,) = {answer.headers["Location"] for answer in answers}
    replayed = [answer for answer in keyed if answer.headers.get("Idempotency-Replayed") == "true"]
    assert len(replayed) == MANY - 1 and len({answer.content for answer in keyed}) == 1
    celery_worker_process(concurrency=2)
    assert scripts[1].ended(location)["state"] == "done"
    again = scripts[0].post("fits/", question, 200)
    assert again.headers["Location"] == location and "Retry-After" not in again.headers
    counts = [Fit.objects.count(), Job.objects.filter(kind="fit").count(), FitResult.objects.count()]
    assert [*counts, ModelEvidence.objects.count(), IdempotencyKey.objects.count()] == [1, 1, 1, 1, 1]
    assert chain_breaks() == []


def test_a_run_that_is_sent_twenty_times_at_once_is_logged_once(scripts: list[RestClient]) -> None:
    cupboard(scripts[0])
    keyed = sent_at_once(scripts, "runs/", run_entry("K01", 1.0), **{"Idempotency-Key": "K01-of-today"})
    assert {answer.status_code for answer in keyed} == {201}
    assert len({answer.content for answer in keyed}) == 1
    other = run_entry("K01", 2.0)
    refused = scripts[1].post("runs/", other, 422, Idempotency_Key="K01-of-today")
    assert "this key was used for another request" in refused.json()["detail"]
    plain = sent_at_once(scripts, "runs/", run_entry("K02", 1.0))
    assert sorted(answer.status_code for answer in plain) == [201] + [422] * (MANY - 1)
    assert all("already" in answer.json()["detail"] for answer in plain if answer.status_code == 422)
    assert (Run.objects.count(), RunRevision.objects.count()) == (2, 2)
    assert chain_breaks() == []
