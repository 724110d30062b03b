"""Fits over REST: proposed, asked for, followed, read, stopped, tried again."""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
import pytest
from django.db import connections

from kinetics_db.evidence.models import VERDICTS
from kinetics_db.fits.models import Fit
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import claim_job, fail_job
from tests.api.conftest import Script, problem
from tests.api.study import Asked, costs_few_queries, fields_of, hides
from tests.factories.flow import compute_now

pytestmark = pytest.mark.django_db

CONSTANTS = [{"name": "k", "start": 0.02}]


@pytest.fixture
def asked() -> Asked:
    return Asked.fresh()


def question(asked: Asked, **change: Any) -> dict[str, Any]:
    body = {
        "dataset": asked.study.dataset.pk,
        "mechanism_version": asked.study.version.pk,
        "constants": CONSTANTS,
        **change,
    }
    return {name: value for name, value in body.items() if value is not ...}


def requested(asked: Asked, **change: Any) -> Any:
    return asked.script.post("fits/", question(asked, **change))


def test_a_fit_is_asked_for_followed_and_read(asked: Asked) -> None:
    response = requested(asked)
    assert response.status_code == 202 and int(response["Retry-After"]) > 0
    path = response["Location"].removeprefix("/api/v1/")
    open_fit = asked.script.get(path)
    assert open_fit.json() == response.json() and int(open_fit["Retry-After"]) > 0
    assert (open_fit.json()["state"], open_fit.json()["result"]) == ("waiting", None)
    assert open_fit.json()["request"]["casting"]["columns"] == {"A": "A", "B": "B"}
    waiting = asked.script.get(path, If_None_Match=open_fit["ETag"])
    assert waiting.status_code == 304 and "Retry-After" in waiting
    compute_now(Fit.objects.get())
    done = asked.script.get(path, If_None_Match=open_fit["ETag"])
    body = done.json()
    assert done.status_code == 200 and "Retry-After" not in done
    assert (body["state"], body["progress"], body["stale_because"]) == ("done", 1.0, [])
    result = body["result"]
    assert result["status"] == "converged" and len(result["digest"]) == 64
    (k,) = result["constants"]
    assert k["constant"] == "k" and k["unit"] == "1/s" and k["determined"] is True and k["where"] is None
    assert k["low"] < k["value"] < k["high"] and k["value"] == pytest.approx(0.01, rel=0.05)
    names = [p["name"] for p in result["parameters"]]
    assert names[0] == "k" and np.shape(result["covariance"]) == (len(names), len(names))
    assert result["details"]["points"] == 48 and result["details"]["engine"] == body["engine"]


def test_the_same_question_is_the_same_fit(asked: Asked) -> None:
    first, second = requested(asked), requested(asked, constants=[{"name": "k", "start": 2e-2}])
    assert first.status_code == second.status_code == 202
    assert second["Location"] == first["Location"] and Fit.objects.count() == 1
    compute_now(Fit.objects.get())
    ended = requested(asked)
    assert ended.status_code == 200 and ended["Location"] == first["Location"] and "Retry-After" not in ended
    assert requested(asked, settings={"seed": 2}).json()["id"] != first.json()["id"]


def test_everything_that_may_be_stated_is_taken(asked: Asked) -> None:
    response = requested(
        asked,
        casting={"compounds": {"A": "A"}, "columns": {"B": None}},
        constants=[
            {
                "name": "k", "start": 0.01, "scope": "own per run", "lower": 1e-4, "upper": 1, "positive": True,
                "prior": {"mean": 0.01, "sd": 2}, "starts": {"R-1": 0.02}, "group_by": None,
            }
        ],
        start_concentrations=[{"species": "A", "start": 0.01, "scope": "own per run"}],
        settings={"error_model": "one sigma", "confidence": 0.9, "starts": 2},
        without_owners=[],
    )  # fmt: skip
    request = response.json()["request"]
    assert response.status_code == 202 and request["casting"]["columns"] == {"A": "A", "B": None}
    assert request["constants"][0]["prior"] == {"mean": 0.01, "sd": 2}
    assert request["settings"]["confidence"] == 0.9 and request["settings"]["max_iterations"] == 200


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"dataset": ...}, "dataset"), ({"dataset": None}, "dataset"), ({"dataset": 999_999}, "dataset"),
        ({"dataset": "1"}, "dataset"), ({"dataset": True}, "dataset"), ({"dataset": 2**53 - 1}, "dataset"),
        ({"mechanism_version": ...}, "mechanism_version"), ({"mechanism_version": 999_999}, "mechanism_version"),
        ({"constants": ...}, "k"), ({"constants": []}, "k"), ({"constants": {}}, "constants"),
        ({"constants": [3]}, "constants.1"), ({"constants": [{}]}, "constants.1.name"),
        ({"constants": [{"name": "k"}]}, "constants.1.start"),
        ({"constants": [{"name": "k", "start": "1"}]}, "constants.1.start"),
        ({"constants": [{"name": "k", "start": -1}]}, "k"), ({"constants": [{"name": "k", "start": 0}]}, "k"),
        ({"constants": [{"name": "k", "start": 1, "colour": 1}]}, "constants.1"),
        ({"constants": [{"name": "k", "start": 1, "prior": 3}]}, "constants.1.prior"),
        ({"constants": [{"name": "k", "start": 1, "starts": {"R-1": None}}]}, "constants.1.starts.R-1"),
        ({"constants": [{"name": "k", "start": 1, "starts": {"R-9": 1}, "scope": "own per run"}]}, "k"),
        ({"constants": [{"name": "k", "start": 1, "scope": "in a group"}]}, "k"),
        ({"constants": [{"name": "k", "start": 1, "scope": "elsewhere"}]}, "k"),
        ({"constants": [{"name": "q", "start": 1}, *CONSTANTS]}, "q"), ({"constants": CONSTANTS * 2}, "k"),
        ({"constants": CONSTANTS * 1001}, "constants"),
        ({"constants": [{"name": "k", "start": 1, "starts": {str(i): 1 for i in range(10_001)}}]}, "constants"),
        ({"casting": []}, "casting"), ({"casting": {"species": {}}}, "casting.species"),
        ({"casting": {"compounds": {"A": "Z"}}}, "casting.compounds.A"),
        ({"casting": {"compounds": {"A": 3}}}, "casting.compounds.A"),
        ({"casting": {"columns": {"A": "B"}}}, "casting.columns"), ({"casting": {"columns": []}}, "casting.columns"),
        ({"casting": {"compounds": {"Q": "A"}}}, "casting.compounds"),
        ({"start_concentrations": [{"species": "Z", "start": 1}]}, "[Z]0"),
        ({"start_concentrations": "A"}, "start_concentrations"),
        ({"settings": {"rtol": 7}}, "rtol"), ({"settings": {"starts": 1.5}}, "settings.starts"),
        ({"settings": {"hope": 1}}, "settings"), ({"settings": []}, "settings"),
        ({"settings": {"max_seconds": 1e300}}, "max_seconds"),
        ({"settings": {"error_model": ["x"]}}, "settings.error_model"),
        ({"without_owners": ["nobody"]}, "without_owners"), ({"without_owners": [3]}, "without_owners.1"),
        ({"without_owners": "stock"}, "without_owners"), ({"colour": 1}, "colour"),
    ],
)  # fmt: skip
def test_a_question_that_cannot_be_is_refused_with_its_field(
    asked: Asked, change: dict[str, Any], field: str
) -> None:
    assert field in fields_of(problem(requested(asked, **change), 422))
    assert not Fit.objects.exists() and not Job.objects.exists()


def test_a_mechanism_of_another_project_is_refused(asked: Asked) -> None:
    other = Asked(Asked.fresh(starts=(1.0,)).study, asked.script)
    response = requested(asked, mechanism_version=other.study.version.pk)
    assert fields_of(problem(response, 422)) == ["mechanism_version"]


def test_a_proposal_says_what_a_question_needs(asked: Asked) -> None:
    numbers = f"dataset={asked.study.dataset.pk}&mechanism_version={asked.study.version.pk}"
    body = asked.script.get(f"fits/propose/?{numbers}").json()
    assert body["casting"] == {"compounds": {"A": "A"}, "columns": {"A": "A", "B": "B"}}
    assert body["undecided"] == {"compounds": [], "columns": []}
    assert body["constants"] == [{"name": "k", "unit": "1/s"}] and body["concentration_unit"] == "mol/L"
    assert body["species"] == ["A", "B"] and body["settings"]["confidence"] == 0.95
    assert body["owners"] == ["run R-1", "run R-2"]
    same = {name: body[name] for name in ("dataset", "mechanism_version", "casting", "settings")}
    made = asked.script.post("fits/", {**same, "constants": CONSTANTS})
    assert made.status_code == 202 and made["Location"] == requested(asked)["Location"]


def test_a_proposal_leaves_open_what_has_no_namesake() -> None:
    asked = Asked.fresh(text="ester --k--> B")
    numbers = f"dataset={asked.study.dataset.pk}&mechanism_version={asked.study.version.pk}"
    body = asked.script.get(f"fits/propose/?{numbers}").json()
    assert body["undecided"] == {"compounds": ["A"], "columns": ["A"]}
    found = fields_of(problem(requested(asked), 422))
    assert {"casting.compounds.A", "casting.columns.A"} <= set(found)


@pytest.mark.parametrize(
    ("query", "field"),
    [("", "dataset"), ("dataset=1", "mechanism_version"), ("dataset=x&mechanism_version=1", "dataset"),
     ("dataset=999999&mechanism_version=1", "dataset"), ("dataset=%C2%B2&mechanism_version=1", "dataset"),
     ("dataset=" + "9" * 30 + "&mechanism_version=1", "dataset"), ("colour=1", "colour")],
)  # fmt: skip
def test_a_proposal_needs_a_dataset_and_a_version(asked: Asked, query: str, field: str) -> None:
    assert field in fields_of(problem(asked.script.get(f"fits/propose/?{query}"), 422))


def test_curves_are_points_and_a_line_through_the_model(asked: Asked) -> None:
    fit = asked.fit()
    response = asked.script.get(f"fits/{fit.pk}/curves/")
    body = response.json()
    assert body["unit"] == "mol/L" and [run["name"] for run in body["runs"]] == ["R-1", "R-2"]
    run = body["runs"][0]
    assert run["table"] == asked.study.tables[0].pk and run["observables"] == ["A", "B"]
    assert np.shape(run["points"]["observed"]) == np.shape(run["points"]["model"]) == (12, 2)
    times, values = np.array(run["curve"]["times"]), np.array(run["curve"]["values"])
    assert run["curve"]["smooth"] is True and len(times) > 100
    at_points = values[np.searchsorted(times, run["points"]["times"])]
    np.testing.assert_allclose(at_points, run["points"]["model"], atol=1e-7)
    assert asked.script.get(f"fits/{fit.pk}/curves/", If_None_Match=response["ETag"]).status_code == 304


def test_evidence_of_a_fit_is_its_verdicts_with_their_tests(asked: Asked) -> None:
    fit = asked.fit()
    body = asked.script.get(f"fits/{fit.pk}/evidence/").json()
    assert body["fit"] == fit.pk and {run["verdict"] for run in body["runs"]} <= set(VERDICTS)
    assert [run["experiment"] for run in body["runs"]] == ["R-1", "R-2"]
    assert body["thresholds"] and body["model"]["aicc"] is not None


def test_a_fit_without_a_result_has_no_curves_and_no_evidence(asked: Asked) -> None:
    fit = asked.fit(compute=False)
    for part in ("curves", "evidence"):
        assert "yet" in problem(asked.script.get(f"fits/{fit.pk}/{part}/"), 404)["detail"]


def test_a_fit_that_waits_is_stopped_at_once_and_tried_again(asked: Asked) -> None:
    fit = asked.fit(compute=False)
    stopped = asked.script.post(f"fits/{fit.pk}/stop/")
    assert stopped.status_code == 200 and stopped.json()["state"] == "stopped"
    problem(asked.script.post(f"fits/{fit.pk}/stop/"), 409)
    again = asked.script.post(f"fits/{fit.pk}/retry/")
    assert again.status_code == 202 and again.json()["state"] == "waiting" and "Retry-After" in again
    problem(asked.script.post(f"fits/{fit.pk}/retry/"), 409)
    assert fields_of(problem(asked.script.post(f"fits/{fit.pk}/stop/", {"now": True}), 422)) == ["now"]


def test_a_fit_that_runs_is_asked_to_stop(asked: Asked) -> None:
    fit = asked.fit(compute=False)
    claim_job(job_for(kind="fit", subject_id=fit.pk).pk)
    response = asked.script.post(f"fits/{fit.pk}/stop/", Idempotency_Key="stop-1")
    assert response.status_code == 202 and response.json()["state"] == "running"
    again = asked.script.post(f"fits/{fit.pk}/stop/", Idempotency_Key="stop-1")
    assert again.status_code == 202 and again["Retry-After"] == response["Retry-After"]


def test_a_fit_that_failed_says_why(asked: Asked) -> None:
    fit = asked.fit(compute=False)
    claim = claim_job(job_for(kind="fit", subject_id=fit.pk).pk)
    assert claim is not None
    fail_job(claim, reason="the data were gone")
    body = asked.script.get(f"fits/{fit.pk}/").json()
    assert (body["state"], body["message"], body["result"]) == ("failed", "the data were gone", None)


def test_fits_are_found_by_state_mechanism_version_and_dataset(asked: Asked) -> None:
    done, waiting = asked.fit(), asked.fit(start=0.03, compute=False)
    version, dataset = asked.study.version.pk, asked.study.dataset.pk
    found = {
        query: [row["id"] for row in asked.script.get(f"fits/?project={asked.slug}{query}").json()["items"]]
        for query in ("", "&state=done", "&state=waiting", "&state=crashed", "&mechanism=decay", "&mechanism=other",
                      f"&version={version}", "&version=999999", f"&dataset={dataset}&state=done")
    }  # fmt: skip
    both = [waiting.pk, done.pk]
    assert found == {
        "": both, "&state=done": [done.pk], "&state=waiting": [waiting.pk], "&state=crashed": [],
        "&mechanism=decay": both, "&mechanism=other": [], f"&version={version}": both, "&version=999999": [],
        f"&dataset={dataset}&state=done": [done.pk],
    }  # fmt: skip


@pytest.mark.parametrize(
    ("query", "field"),
    [("", "project"), ("project=x&state=lost", "state"), ("project=x&version=one", "version"),
     ("project=x&dataset=-1", "dataset"), ("project=x&colour=1", "colour"), ("project=x&state=", "state")],
)  # fmt: skip
def test_a_filter_that_cannot_be_is_refused(asked: Asked, query: str, field: str) -> None:
    assert fields_of(problem(asked.script.get(f"fits/?{query}"), 422)) == [field]


def test_fits_are_listed_with_their_verdicts_in_few_queries(asked: Asked) -> None:
    done = asked.fit()
    for start in (0.03, 0.04):
        asked.fit(start=start, compute=False)
    rows = costs_few_queries(asked.script, f"fits/?project={asked.slug}")["items"]
    assert [row["state"] for row in rows] == ["waiting", "waiting", "done"]
    last = rows[-1]
    assert last["id"] == done.pk and last["status"] == "converged" and last["stale"] is False
    assert sum(last["verdicts"].values()) == 2 and rows[0]["verdicts"] == {} and rows[0]["status"] is None
    assert last["mechanism_version"] == {"id": asked.study.version.pk, "mechanism": "decay", "number": 1}


def test_fits_are_for_members_and_asked_for_by_contributors(asked: Asked) -> None:
    fit = asked.fit()
    numbers = f"dataset={asked.study.dataset.pk}&mechanism_version={asked.study.version.pk}"
    for path in (
        f"fits/?project={asked.slug}",
        *(f"fits/{fit.pk}/{part}" for part in ("", "curves/", "evidence/")),
    ):
        hides(path)
        assert asked.reader().get(path).status_code == 200
    assert asked.read_only().get(f"fits/propose/?{numbers}").status_code == 200
    problem(asked.script.get("fits/999999/"), 404)
    for action in ("stop", "retry"):
        asked.refuses_others(f"fits/{fit.pk}/{action}/")
    problem(asked.reader().post("fits/", question(asked)), 403)
    problem(asked.read_only().post("fits/", question(asked)), 403)
    problem(Script().post("fits/", question(asked)), 401)
    stranger = Asked.fresh(starts=(1.0,))
    assert fields_of(problem(stranger.script.post("fits/", question(asked)), 422)) == ["dataset"]


@pytest.mark.django_db(transaction=True)
@pytest.mark.parametrize("with_keys", [False, True])
def test_twenty_equal_questions_at_once_are_one_fit(with_keys: bool) -> None:
    asked = Asked.fresh()
    answers: list[Any] = []
    start = threading.Barrier(20)

    def send(number: int) -> None:
        keys = {"Idempotency_Key": f"key-{number}"} if with_keys else {}
        start.wait()
        answers.append(Script(asked.script.secret).post("fits/", question(asked), **keys))
        connections.close_all()

    threads = [threading.Thread(target=send, args=(number,)) for number in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [a.status_code for a in answers] == [202] * 20, {a.content for a in answers}
    assert len({a["Location"] for a in answers}) == 1
    assert Fit.objects.count() == Job.objects.count() == 1
