"""Runs over REST: logged, found, revised with If-Match, sealed."""

from __future__ import annotations

from typing import Any

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.evidence.models import VERDICTS
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.services import write_version
from kinetics_db.runs.models import Run, RunRevision
from tests.api.conftest import Lab, Script, problem
from tests.factories.flow import compute_now
from tests.factories.people import make_member, make_user
from tests.factories.small import make_study
from tests.factories.tokens import make_token


def test_a_logged_run_is_there_at_its_location(lab: Lab) -> None:
    response = lab.script.post("runs/", lab.entry(notes="stirred fast"))
    assert response.status_code == 201
    again = lab.script.get(response["Location"].removeprefix("/api/v1/"))
    assert again.json() == response.json() and again["ETag"] == response["ETag"]
    body = again.json()
    assert body["project"] == "hydrolysis" and body["created_by"] == "mira" and body["sealed"] is None
    assert body["revision"]["number"] == 1 and len(body["revision"]["digest"]) == 64
    assert body["entry"]["notes"] == "stirred fast"
    assert body["entry"]["temperature"] == {"value": 40.0, "unit": "degC", "uncertainty": 0.0}
    (start,) = body["start"]
    assert start["compound"] == "ester"
    assert start["concentration"] == pytest.approx({"value": 0.01, "unit": "mol/L", "uncertainty": 1e-4})


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"charges": [{"compound": "ester", "amount": {"value": 1, "unit": "wat"}}]}, "charges.1"),
        ({"charges": [{"compound": "nobody", "amount": {"value": 1, "unit": "mM"}}]}, "charges.1.compound"),
        ({"charges": [{"compound": "ester", "amount": {"value": "1", "unit": "mM"}}]}, "charges.1.amount.value"),
        ({"charges": "none"}, "charges"),
        ({"temperature": {"value": 40}}, "temperature.unit"),
        ({"code": ""}, "code"),
        ({"colour": "red"}, "colour"),
        ({"project": 3}, "project"),
    ],
)  # fmt: skip
def test_an_entry_that_cannot_be_is_refused_with_the_field(
    lab: Lab, change: dict[str, Any], field: str
) -> None:
    problems = problem(lab.script.post("runs/", lab.entry(**change)), 422)["problems"]
    places = [p.get("field", "") for p in problems]
    assert any(place.startswith(field) or field.startswith(place) for place in places if place), problems
    assert not Run.objects.exists()


def test_a_run_needs_a_project_that_one_may_see(lab: Lab) -> None:
    (found,) = problem(lab.script.post("runs/", {"code": "K01", "charges": []}), 422)["problems"]
    assert found["field"] == "project"
    problem(lab.script.post("runs/", lab.entry(project="nowhere")), 404)


def test_runs_are_found_by_what_they_were(lab: Lab) -> None:
    lab.logged("K01")
    lab.logged("K02", temperature={"value": 60, "unit": "degC"}, control_kind="blank")
    lab.logged(
        "K03", charges=[{"compound": "ester", "amount": {"value": 50, "unit": "mM"}}], replicate_of="K01"
    )
    found = {
        query: [r["code"] for r in lab.script.get(f"runs/?order=code&{query}").json()["items"]]
        for query in ("", "compound=ester&c0_min=0.02", "T_min=50%20degC", "control=blank", "replicate_of=K01",
                      "project=hydrolysis&code=k02", "author=nobody", "has=table", "after=2999-01-01")
    }  # fmt: skip
    assert found == {
        "": ["K01", "K02", "K03"],
        "compound=ester&c0_min=0.02": ["K03"],
        "T_min=50%20degC": ["K02"],
        "control=blank": ["K02"],
        "replicate_of=K01": ["K03"],
        "project=hydrolysis&code=k02": ["K02"],
        "author=nobody": [],
        "has=table": [],
        "after=2999-01-01": [],
    }


def test_a_row_of_the_list_says_what_the_run_was(lab: Lab) -> None:
    run = lab.logged("K01", control_kind="blank")
    (row,) = lab.script.get("runs/").json()["items"]
    assert row["id"] == run["id"] and row["code"] == "K01" and row["project"] == "hydrolysis"
    assert row["temperature"] == pytest.approx({"value": 313.15, "unit": "K", "uncertainty": 0.0})
    assert row["start"] == run["start"]
    assert (row["files"], row["tables"], row["revision"]) == (0, 0, 1)
    assert row["control_kind"] == "blank" and row["replicate_of"] is None


@pytest.mark.parametrize(
    ("query", "field"),
    [("T_min=warm", "T_min"), ("c0_min=1", "c0_min"), ("wavelength=455", "wavelength"), ("x=1", "x"),
     ("order=random", "order"), ("after=tomorrow", "after"), ("has=hope", "has")],
)  # fmt: skip
def test_a_filter_that_cannot_be_is_refused_with_its_name(lab: Lab, query: str, field: str) -> None:
    assert problem(lab.script.get(f"runs/?{query}"), 422)["problems"][0]["field"] == field


def patch(lab: Lab, run: dict[str, Any], changes: object, **more: Any) -> Any:
    path = f"runs/{run['id']}/"
    more.setdefault("If_Match", lab.script.get(path)["ETag"])
    return lab.script.ask("PATCH", path, changes, **more)


def test_a_patch_replaces_what_is_given_and_takes_away_what_is_null(lab: Lab) -> None:
    run = lab.logged(notes="first", atmosphere="air")
    response = patch(lab, run, {"notes": "second", "temperature": None, "reason": "the clock was wrong"})
    body = response.json()
    assert response.status_code == 200
    assert body["revision"]["number"] == 2 and body["revision"]["reason"] == "the clock was wrong"
    assert body["entry"]["notes"] == "second" and body["entry"]["temperature"] is None
    assert body["entry"]["atmosphere"] == "air" and body["entry"]["charges"] == run["entry"]["charges"]
    assert response["ETag"] == lab.script.get(f"runs/{run['id']}/")["ETag"]


def test_a_patch_reaches_into_amounts_and_sections(lab: Lab) -> None:
    run = lab.logged(sections={"clock": {"zero": "first drop"}, "vessel": {"name": "tube"}})
    changes = {"temperature": {"value": 41}, "sections": {"clock": {"zero": "lamp on"}, "vessel": None}}
    body = patch(lab, run, changes, content_type="application/merge-patch+json").json()
    assert body["entry"]["temperature"]["value"] == 41 and body["entry"]["temperature"]["unit"] == "degC"
    assert body["entry"]["sections"] == {"clock": {"zero": "lamp on"}}


def test_a_patch_that_changes_nothing_makes_no_revision(lab: Lab) -> None:
    run = lab.logged()
    assert patch(lab, run, {"notes": ""}).json() == run
    assert RunRevision.objects.count() == 1


def test_a_patch_must_say_what_it_is_a_change_of(lab: Lab) -> None:
    run = lab.logged()
    problem(lab.script.ask("PATCH", f"runs/{run['id']}/", {"notes": "x"}), 428)


def test_a_patch_of_an_earlier_state_is_refused(lab: Lab) -> None:
    run = lab.logged()
    seen = lab.script.get(f"runs/{run['id']}/")["ETag"]
    assert patch(lab, run, {"notes": "mine"}, If_Match=seen).status_code == 200
    for etag in (seen, f"W/{seen}", '"nonsense"'):
        problem(patch(lab, run, {"notes": "theirs"}, If_Match=etag), 412)
    assert RunRevision.objects.count() == 2
    assert patch(lab, run, {"notes": "whatever it was"}, If_Match="*").status_code == 200


@pytest.mark.parametrize(
    "changes", [{"code": "K99"}, {"code": None}, {"charges": []}, {"colour": 1}, {"reason": 3}, {"project": "x"},
                {"temperature": "hot"}, {"sections": {"clock": "x"}}],
)  # fmt: skip
def test_a_patch_that_cannot_be_is_refused_and_changes_nothing(lab: Lab, changes: dict[str, Any]) -> None:
    run = lab.logged()
    assert problem(patch(lab, run, changes), 422)["problems"]
    assert RunRevision.objects.count() == 1


def test_sealing_counts_once_changes_the_tag_and_asks_for_reasons(lab: Lab) -> None:
    run = lab.logged()
    path = f"runs/{run['id']}/"
    before = lab.script.get(path)["ETag"]
    sealed = lab.script.post(f"{path}seal/")
    assert sealed.json()["sealed"] is not None and sealed["ETag"] == lab.script.get(path)["ETag"] != before
    problem(lab.script.post(f"{path}seal/"), 409)
    assert problem(patch(lab, run, {"notes": "x"}), 422)["problems"][0]["field"] == "reason"
    assert patch(lab, run, {"notes": "x", "reason": "typed wrongly"}).status_code == 200


def test_revisions_are_listed_and_their_snapshots_are_immutable_bytes(lab: Lab) -> None:
    run = lab.logged()
    patch(lab, run, {"notes": "second", "reason": "why not"})
    rows = lab.script.get(f"runs/{run['id']}/revisions/").json()["items"]
    assert [(r["number"], r["reason"], r["created_by"]) for r in rows] == [
        (2, "why not", "mira"),
        (1, "", "mira"),
    ]
    first = lab.script.get(f"runs/{run['id']}/revisions/1/")
    assert first.content == bytes(RunRevision.objects.get(number=1).canonical)
    assert "immutable" in first["Cache-Control"] and first["Content-Type"] == "application/json"
    known = lab.script.get(f"runs/{run['id']}/revisions/1/", If_None_Match=first["ETag"])
    assert known.status_code == 304 and "immutable" in known["Cache-Control"]
    problem(lab.script.get(f"runs/{run['id']}/revisions/3/"), 404)


def test_a_reader_reads_and_does_not_write(lab: Lab) -> None:
    run = lab.logged()
    reader = lab.script_of(make_member(lab.project, "reader"), scope="write")
    assert reader.get(f"runs/{run['id']}/").json() == run
    assert "contributor" in problem(reader.post("runs/", lab.entry("K02")), 403)["detail"]
    problem(reader.ask("PATCH", f"runs/{run['id']}/", {"notes": "x"}, If_Match="*"), 403)


@pytest.mark.django_db
def test_explanations_are_verdicts_and_the_versions_never_tried() -> None:
    study = make_study(starts=(10.0, 20.0))
    never = write_version(
        user=study.user, project_id=study.project.pk, name="reversible", text="A <--k1 / k2--> B"
    )
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=study.version,
        constants=[Constant("k", start=0.02)],
    )
    compute_now(fit)
    run = study.tables[0].run
    script = Script(make_token(study.user)[1])
    body = script.get(f"runs/{run.pk}/explanations/").json()
    (verdict,) = body["verdicts"]
    assert verdict["version"] == {"id": study.version.pk, "mechanism": "decay", "number": 1}
    assert verdict["fit_id"] == fit.pk and verdict["verdict"] in VERDICTS and verdict["stale"] == []
    assert body["untried"] == [{"id": never.pk, "mechanism": "reversible", "number": 1}]
    assert body["run"] == run.pk and body["more"] is False
    with CaptureQueriesContext(connection) as queries:
        script.get(f"runs/{run.pk}/explanations/")
    assert len(queries) <= 6, [q["sql"][:150] for q in queries]
    problem(Script(make_token(make_user())[1]).get(f"runs/{run.pk}/explanations/"), 404)
