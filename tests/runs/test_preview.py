"""What an entry comes to while it is typed."""

from __future__ import annotations

from dataclasses import replace

import pytest

from kinetics_db.errors import InvalidInput, NotFound, NotPermitted
from kinetics_db.materials.services import enter_compound
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run, RunRevision
from kinetics_db.runs.selectors import start_concentrations
from kinetics_db.runs.services import Preview, log_run, preview_entry
from tests.factories.people import make_member, make_project

ESTER = ChargeEntry(Amount(15.0, "mg", 0.15), compound="ester")
AMINE = ChargeEntry(Amount(0.2, "mL", 0.001), compound="amine")
ENTRY = RunEntry("K01", (ESTER, AMINE), total_volume=Amount(10.0, "mL", 0.1))


@pytest.fixture
def project(db: None) -> Project:
    found = make_project()
    enter_compound(user=found.created_by, project_id=found.pk, name="ester", molar_mass=150.0)
    enter_compound(
        user=found.created_by, project_id=found.pk, name="amine", molar_mass=60.0, density=(0.9, "g/mL")
    )
    return found


def look(project: Project, entry: RunEntry) -> Preview:
    return preview_entry(user=project.created_by, project_id=project.pk, entry=entry)


def test_a_preview_says_what_the_logged_run_will_say_and_stores_nothing(project: Project) -> None:
    seen = look(project, ENTRY)
    assert (Run.objects.count(), RunRevision.objects.count()) == (0, 0)
    revision = log_run(user=project.created_by, project_id=project.pk, entry=ENTRY)
    assert seen.starts == start_concentrations(revision)
    assert (seen.basis, seen.assumed_additive, seen.problems) == ("mol/L", False, ())
    assert (seen.volume, seen.volume_u) == (pytest.approx(0.010), pytest.approx(0.0001))
    assert [start.value for start in seen.starts] == pytest.approx([0.01, 0.3])


def test_what_can_be_computed_is_shown_beside_what_is_wrong(project: Project) -> None:
    unknown = ChargeEntry(Amount(5.0, "mg"), compound="acid")
    seen = look(project, replace(ENTRY, code="", charges=(ESTER, unknown, AMINE), control_kind="sham"))
    assert [start.compound for start in seen.starts] == ["ester", "amine"]
    assert {problem.field for problem in seen.problems} == {"code", "charges.2", "control_kind"}


def test_a_missing_volume_leaves_out_what_needs_it(project: Project) -> None:
    final = ChargeEntry(Amount(20.0, "mM"), compound="amine")
    seen = look(project, replace(ENTRY, charges=(ESTER, final), total_volume=None))
    assert [(start.compound, start.value) for start in seen.starts] == [("amine", pytest.approx(0.02))]
    assert [problem.field for problem in seen.problems] == ["total_volume"]
    assert seen.volume is None


def test_a_volume_from_the_charges_is_said_to_be_assumed(project: Project) -> None:
    seen = look(project, replace(ENTRY, charges=(AMINE,), total_volume=None))
    assert (seen.assumed_additive, seen.volume) == (True, pytest.approx(0.0002))


def test_charges_of_no_volume_ask_for_the_total_volume(project: Project) -> None:
    nothing = ChargeEntry(Amount(0.0, "mL"), compound="amine")
    seen = look(project, replace(ENTRY, charges=(nothing,), total_volume=None))
    assert [problem.field for problem in seen.problems] == ["total_volume"]
    with pytest.raises(InvalidInput, match="total volume is not known"):
        log_run(
            user=project.created_by,
            project_id=project.pk,
            entry=replace(ENTRY, charges=(nothing,), total_volume=None),
        )


def test_percent_beside_milligrams_shows_no_concentrations(project: Project) -> None:
    seen = look(project, replace(ENTRY, charges=(ESTER, ChargeEntry(Amount(90.0, "%"), compound="amine"))))
    assert seen.starts == ()
    assert "mixed" in str(seen.problems[0])


@pytest.mark.parametrize(
    ("entry", "field"),
    [
        (replace(ENTRY, code="K\0"), "code"),
        (replace(ENTRY, charges=(replace(ESTER, compound="e" * 100),)), "charges.1"),
        (replace(ENTRY, charges=(replace(ESTER, compound=None),)), "charges.1"),
        (replace(ENTRY, charges=(replace(ESTER, amount=Amount(1.0, "xyz")),)), "charges.1.unit"),
        (replace(ENTRY, charges=(replace(ESTER, amount=Amount(-1.0, "mg")),)), "charges.1.value"),
        (replace(ENTRY, charges=(replace(ESTER, amount=Amount(float("inf"), "mg")),)), "charges.1.value"),
        (replace(ENTRY, charges=(replace(AMINE, amount=Amount(1.0, "mL", -1.0)),), total_volume=None),
         "charges.1.standard_uncertainty"),
        (replace(ENTRY, total_volume=Amount(-10.0, "mL")), "total_volume.total_volume"),
        (replace(ENTRY, temperature=Amount(25.0, "bar")), "temperature.unit"),
        (replace(ENTRY, started="yesterday"), "started"),
        (replace(ENTRY, notes="n" * 100_001), "notes"),
        (replace(ENTRY, sections={"lid": {}}), "sections"),
        (replace(ENTRY, charges=()), "charges"),
    ],
)  # fmt: skip
def test_nothing_that_is_typed_ends_a_preview(project: Project, entry: RunEntry, field: str) -> None:
    assert field in {problem.field for problem in look(project, entry).problems}
    with pytest.raises(InvalidInput):
        log_run(user=project.created_by, project_id=project.pk, entry=entry)


def test_only_who_may_log_may_look(project: Project) -> None:
    with pytest.raises(NotPermitted):
        preview_entry(user=make_member(project, "reader"), project_id=project.pk, entry=ENTRY)
    with pytest.raises(NotFound):
        preview_entry(user=make_project().created_by, project_id=project.pk, entry=ENTRY)
