"""Logging, revising and sealing runs."""

from __future__ import annotations

from dataclasses import replace

import pytest

from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.models import Project
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.provenance.selectors import lineage
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run, RunRevision
from kinetics_db.runs.selectors import conditions_of, latest_revision
from kinetics_db.runs.services import log_run, revise_run, seal_run
from tests.factories.people import make_member, make_project

pytestmark = pytest.mark.django_db


@pytest.fixture
def project() -> Project:
    project = make_project()
    user = project.created_by
    enter_compound(user=user, project_id=project.pk, name="ester", molar_mass=200.0, density=(1.1, "g/mL"))
    enter_compound(user=user, project_id=project.pk, name="base", molar_mass=50.0)
    enter_lot(
        user=user, project_id=project.pk, code="E-1", compound="ester", purity=0.98, purity_uncertainty=0.005
    )
    make_up_stock(
        user=user,
        project_id=project.pk,
        code="B-1",
        portions=[Portion(1.0, "g", compound="base", uncertainty=0.002)],
        volume=(100.0, "mL"),
        volume_uncertainty=0.1,
    )
    return project


def entry(**changes: object) -> RunEntry:
    return replace(
        RunEntry(
            code="R-1",
            charges=[
                ChargeEntry(Amount(102.0, "mg", 0.5), lot="E-1"),
                ChargeEntry(Amount(500.0, "uL", 3.0), stock="B-1"),
            ],
            total_volume=Amount(10.0, "mL", 0.02),
            temperature=Amount(25.0, "degC", 0.1),
        ),
        **changes,
    )


def test_a_weighed_lot_and_a_pipetted_stock_become_start_concentrations(project: Project) -> None:
    run = log_run(user=project.created_by, project_id=project.pk, entry=entry())
    start = {part["compound"]: part for part in run.content["start"]}
    # 0.102 g x 0.98 / 200 g/mol / 0.010 L;  1 g / 50 g/mol / 0.1 L x 0.5 mL / 10 mL
    assert start["ester"]["concentration"] == pytest.approx(0.04998, rel=1e-12)
    assert start["base"]["concentration"] == pytest.approx(0.01, rel=1e-12)
    assert start["ester"]["own_relative_u"] == pytest.approx(0.5 / 102.0)
    assert start["ester"]["shared"] == [
        {"owner": "lot E-1 purity", "relative_u": pytest.approx(0.005 / 0.98)}
    ]
    owners = {e["owner"]: e["relative_u"] for e in start["base"]["shared"]}
    assert owners == {"stock B-1 base": pytest.approx(0.002), "stock B-1 volume": pytest.approx(0.001)}
    assert {e["owner"] for e in start["base"]["run_shared"]} == {"volume"}


def test_temperature_is_kept_in_kelvin_with_its_uncertainty_as_a_difference(project: Project) -> None:
    run = log_run(user=project.created_by, project_id=project.pk, entry=entry())
    assert run.content["temperature"] == {"value": pytest.approx(298.15), "u": pytest.approx(0.1)}


def test_what_was_typed_is_kept_beside_what_it_means(project: Project) -> None:
    run = log_run(user=project.created_by, project_id=project.pk, entry=entry())
    assert run.content["entered"]["charges"][0]["amount"] == {"value": 102, "unit": "mg", "u": 0.5}


def test_runs_are_found_by_their_conditions(project: Project) -> None:
    run = log_run(user=project.created_by, project_id=project.pk, entry=entry()).run
    found = conditions_of([run.pk])[run.pk]
    assert found["c0:ester"] == pytest.approx(0.04998)
    assert found["temperature"] == pytest.approx(298.15)
    assert found["volume"] == pytest.approx(0.010)


def test_volumes_are_added_up_and_flagged_where_no_total_volume_is_given(project: Project) -> None:
    charges = [
        ChargeEntry(Amount(100.0, "uL", 1.0), compound="ester"),
        ChargeEntry(Amount(9.9, "mL", 0.01), stock="B-1"),
    ]
    run = log_run(
        user=project.created_by, project_id=project.pk, entry=entry(charges=charges, total_volume=None)
    )
    assert run.content["volume"]["value"] == pytest.approx(0.010)
    assert run.content["volume"]["assumed_additive"] is True
    # 0.1 mL x 1.1 g/mL / 200 g/mol / 10 mL
    assert run.content["start"][0]["concentration"] == pytest.approx(0.055)


@pytest.mark.parametrize(
    ("changes", "field", "says"),
    [
        ({"charges": []}, "charges", "nothing was put in"),
        ({"code": ""}, "code", "no code"),
        ({"charges": [ChargeEntry(Amount(1.0, "furlong"), lot="E-1")]}, "charges.1", "furlong"),
        ({"charges": [ChargeEntry(Amount(-1.0, "mg"), lot="E-1")]}, "charges.1", "-1.0 mg"),
        ({"charges": [ChargeEntry(Amount(float("nan"), "mg"), lot="E-1")]}, "charges.1", "nan"),
        ({"charges": [ChargeEntry(Amount(1e304, "M"), compound="ester")]}, "charges.1", "1e+304"),
        ({"charges": [ChargeEntry(Amount("5", "mg"), lot="E-1")]}, "charges.1", "5"),
        ({"total_volume": Amount(1e305, "L")}, "total_volume", "1e+305"),
        ({"charges": [ChargeEntry(Amount(1.0, "mg"), lot="E-9")]}, "charges.1", "no lot 'E-9'"),
        ({"charges": [ChargeEntry(Amount(1.0, "mg"))]}, "charges.1", "one compound, lot or stock"),
        ({"charges": [ChargeEntry(Amount(1.0, "uL"), compound="base")]}, "charges.1", "density"),
        ({"charges": [ChargeEntry(Amount(1.0, "mmol"), stock="B-1")]}, "charges.1", "mmol"),
        (
            {"total_volume": None, "charges": [ChargeEntry(Amount(1.0, "mg"), lot="E-1")]},
            "total_volume",
            "not known",
        ),
        ({"total_volume": Amount(0.0, "mL")}, "total_volume", "volume"),
        ({"total_volume": Amount(1.0, "mg")}, "total_volume", "mg"),
        ({"temperature": Amount(-300.0, "degC")}, "temperature", "no reaction temperature"),
        ({"replicate_of": "R-9"}, "replicate_of", "no other run"),
        ({"control_kind": "no stirring"}, "control_kind", "no kind of control"),
        ({"started": "yesterday"}, "started", "no date and time"),
        ({"started": "2026-03-05T09:30:00"}, "started", "zone"),
        ({"sections": {"weather": {}}}, "sections", "unknown section"),
        (
            {"sections": {"clock": {"first contact": "now"}}},
            "sections.clock.first contact",
            "number with a unit",
        ),
        (
            {"sections": {"clock": {"first contact": Amount(1.0, "mg")}}},
            "sections.clock.first contact",
            "time",
        ),
    ],
)
def test_an_entry_that_cannot_be_used_is_refused_with_its_place(
    project: Project, changes: dict[str, object], field: str, says: str
) -> None:
    before = AuditEntry.objects.count()
    with pytest.raises(InvalidInput) as refused:
        log_run(user=project.created_by, project_id=project.pk, entry=entry(**changes))
    assert any((p.field or "").startswith(field) and says in str(p) for p in refused.value.problems), (
        refused.value
    )
    assert not Run.objects.exists() and AuditEntry.objects.count() == before


def test_every_problem_of_an_entry_is_told_at_once(project: Project) -> None:
    with pytest.raises(InvalidInput) as refused:
        log_run(
            user=project.created_by,
            project_id=project.pk,
            entry=entry(control_kind="odd", started="soon", charges=[]),
        )
    assert {p.field for p in refused.value.problems} == {"control_kind", "started", "charges"}


def test_a_code_is_used_once_in_a_project(project: Project) -> None:
    log_run(user=project.created_by, project_id=project.pk, entry=entry())
    with pytest.raises(InvalidInput, match="already"):
        log_run(user=project.created_by, project_id=project.pk, entry=entry())


def test_a_revision_keeps_the_one_before_it(project: Project) -> None:
    user = project.created_by
    first = log_run(user=user, project_id=project.pk, entry=entry())
    warmer = entry(temperature=Amount(35.0, "degC"))
    second = revise_run(user=user, run=first.run, entry=warmer, based_on=1, reason="thermometer was misread")
    assert (second.number, latest_revision(first.run).pk) == (2, second.pk)
    assert RunRevision.objects.get(pk=first.pk).content["temperature"]["value"] == pytest.approx(298.15)
    assert conditions_of([first.run.pk])[first.run.pk]["temperature"] == pytest.approx(308.15)
    parents = {link.parent for link in lineage(kind="run revision", record_id=second.pk, upward=True)}
    assert ("run revision", first.pk) in parents
    told = AuditEntry.objects.order_by("-sequence").first()
    assert told and (told.reason, told.digest_before, told.digest_after) == (
        "thermometer was misread",
        first.digest,
        second.digest,
    )


def test_a_revision_that_changes_nothing_is_the_newest_one(project: Project) -> None:
    first = log_run(user=project.created_by, project_id=project.pk, entry=entry())
    again = revise_run(user=project.created_by, run=first.run, entry=entry(), based_on=1)
    assert again.pk == first.pk


def test_whoever_saves_second_is_told_that_the_run_was_changed_meanwhile(project: Project) -> None:
    user = project.created_by
    first = log_run(user=user, project_id=project.pk, entry=entry())
    revise_run(user=user, run=first.run, entry=entry(notes="mine"), based_on=1)
    with pytest.raises(Conflict, match="you saw revision 1, the newest is 2"):
        revise_run(user=user, run=first.run, entry=entry(notes="theirs"), based_on=1)


def test_a_sealed_run_is_amended_only_with_a_reason(project: Project) -> None:
    user = project.created_by
    run = seal_run(user=user, run=log_run(user=user, project_id=project.pk, entry=entry()).run)
    with pytest.raises(InvalidInput, match="sealed"):
        revise_run(user=user, run=run, entry=entry(notes="x"), based_on=1)
    assert (
        revise_run(user=user, run=run, entry=entry(notes="x"), based_on=1, reason="typing error").number == 2
    )
    with pytest.raises(Conflict, match="sealed already"):
        seal_run(user=user, run=run)


def test_a_reader_may_not_log_and_a_stranger_may_not_know(project: Project) -> None:
    with pytest.raises(NotPermitted, match="contributor"):
        log_run(user=make_member(project, "reader"), project_id=project.pk, entry=entry())
    with pytest.raises(NotFound):
        log_run(user=make_project().created_by, project_id=project.pk, entry=entry())
    log_run(user=make_member(project, "contributor"), project_id=project.pk, entry=entry())


def test_the_digest_of_a_run_is_the_same_on_every_database(project: Project) -> None:
    run = log_run(user=project.created_by, project_id=project.pk, entry=entry())
    assert run.digest == "95869570d31f91c64c7611d2a2183081746c98aa46eae52513e0749e11fe10b8"
