"""Entries as plain values and back, and the entry of a stored revision."""

from __future__ import annotations

import json
from typing import Any

import pytest

from kinetics_db.errors import InvalidInput
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.plain import entry_from_plain, entry_to_plain
from kinetics_db.runs.selectors import entry_of
from kinetics_db.runs.services import log_run, revise_run
from tests.factories.people import make_project

FULL = RunEntry(
    code="K 01",
    charges=(
        ChargeEntry(Amount(12.5, "mg", 0.1), lot="L-7", note="slowly\nunder argon"),
        ChargeEntry(Amount(1, "mL", 0.01), stock="amine"),
        ChargeEntry(Amount(0.2, "mmol"), compound="ester"),
    ),
    total_volume=Amount(10, "mL", 0.02),
    temperature=Amount(25.0, "degC", 0.1),
    atmosphere="argon",
    started="2026-03-05T09:30:00+01:00",
    replicate_of="K 00",
    control_kind="without light",
    notes="first\nsecond",
    sections={
        "vessel": {"name": "vial 4", "path": Amount(1, "cm")},
        "clock": {"zero": "the last addition", "first contact": Amount(5, "s"), "lamp offset": Amount(0.5, "min")},
        "headspace": {"pressure": Amount(1.2, "bar"), "volume": Amount(8, "mL", 0.5)},
    },
)  # fmt: skip


@pytest.fixture
def project(db: None) -> Project:
    """A project with materials of each kind and an earlier run K 00."""
    found = make_project()
    about: dict[str, Any] = {"user": found.created_by, "project_id": found.pk}
    enter_compound(**about, name="ester", molar_mass=150.0)
    enter_lot(**about, code="L-7", compound="ester", purity=0.97, purity_uncertainty=0.01)
    make_up_stock(**about, code="amine", portions=[Portion(10.0, "mmol", lot="L-7")], volume=(10.0, "mL"))
    log_run(**about, entry=RunEntry("K 00", (ChargeEntry(Amount(5, "mM"), compound="ester"),)))
    return found


@pytest.mark.parametrize("entry", [FULL, RunEntry("K 02", (ChargeEntry(Amount(90, "%"), compound="ester"),))])
def test_revising_with_the_entry_of_a_revision_changes_nothing(project: Project, entry: RunEntry) -> None:
    first = log_run(user=project.created_by, project_id=project.pk, entry=entry)
    assert entry_of(first) == entry
    again = revise_run(user=project.created_by, run=first.run, entry=entry_of(first), based_on=1)
    assert (again.pk, again.digest) == (first.pk, first.digest)


def test_an_entry_comes_back_from_plain_values_as_it_was(project: Project) -> None:
    plain = json.loads(json.dumps(entry_to_plain(FULL)))
    assert entry_from_plain(plain) == FULL
    stored = log_run(user=project.created_by, project_id=project.pk, entry=FULL)
    assert entry_from_plain(entry_to_plain(entry_of(stored))) == FULL


def test_what_is_left_out_or_null_was_not_stated() -> None:
    plain = {
        "code": "A",
        "charges": [{"compound": "ester", "lot": None, "amount": {"value": 1, "unit": "mM"}}],
        "temperature": None,
        "sections": {"vessel": None, "clock": {"zero": None}},
    }
    entry = entry_from_plain(plain)
    assert entry.charges == (ChargeEntry(Amount(1, "mM"), compound="ester"),)
    assert (entry.temperature, entry.notes, entry.sections) == (None, "", {"clock": {}})


def amount(**more: object) -> dict[str, object]:
    return {"value": 1.0, "unit": "mg", **more}


@pytest.mark.parametrize(
    ("plain", "field", "message"),
    [
        ([], "entry", "not a set of named values"),
        ("K01", "entry", "not a set of named values"),
        ({"charges": []}, "code", "missing"),
        ({"code": "A"}, "charges", "missing"),
        ({"code": "A", "charges": [], "colour": "red"}, "colour", "unknown entry 'colour'"),
        ({"code": 7, "charges": []}, "code", "int in place of text"),
        ({"code": "A" * 81, "charges": []}, "code", "too many"),
        ({"code": "A\0", "charges": []}, "code", "cannot be stored"),
        ({"code": "A", "charges": {}}, "charges", "not a list"),
        ({"code": "A", "charges": [{}] * 201}, "charges", "201 charges are too many"),
        ({"code": "A", "charges": ["ester"]}, "charges.1", "not a set of named values"),
        ({"code": "A", "charges": [{"compound": "x"}]}, "charges.1.amount", "missing"),
        ({"code": "A", "charges": [{"amount": amount(unit=None)}]}, "charges.1.amount.unit", "missing"),
        ({"code": "A", "charges": [{"amount": amount(unit=5)}]}, "charges.1.amount.unit", "no unit"),
        ({"code": "A", "charges": [{"amount": amount(unit="m" * 61)}]}, "charges.1.amount.unit", "no unit"),
        ({"code": "A", "charges": [{"amount": amount(value="1")}]}, "charges.1.amount.value", "not a number"),
        ({"code": "A", "charges": [{"amount": amount(value=True)}]}, "charges.1.amount.value", "not a number"),
        ({"code": "A", "charges": [{"amount": amount(value=10**400)}]}, "charges.1.amount.value", "too large"),
        ({"code": "A", "charges": [{"amount": amount(value=float("nan"))}]}, "charges.1.amount.value", "finite"),
        ({"code": "A", "charges": [{"amount": amount(u=1)}]}, "charges.1.amount.u", "unknown entry 'u'"),
        ({"code": "A", "charges": [{"compound": ["x"], "amount": amount()}]}, "charges.1.compound", "list"),
        ({"code": "A", "charges": [], "temperature": 25}, "temperature", "not a set of named values"),
        ({"code": "A", "charges": [], "sections": {"lid": {}}}, "sections.lid", "unknown entry 'lid'"),
        ({"code": "A", "charges": [], "sections": {"clock": 1}}, "sections.clock", "not a set"),
        ({"code": "A", "charges": [], "sections": {"clock": {"x": 1}}}, "sections.clock.x", "unknown entry 'x'"),
        ({"code": "A", "charges": [], "sections": {"clock": {"zero": 1}}}, "sections.clock.zero", "int"),
        (
            {"code": "A", "charges": [], "sections": {"clock": {"lamp offset": "5 s"}}},
            "sections.clock.lamp offset",
            "not a set of named values",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_read_is_named_by_its_path(plain: Any, field: str, message: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        entry_from_plain(plain)
    assert any(message in p.message for p in caught.value.problems if p.field == field), caught.value.problems


def test_every_problem_is_told_at_once() -> None:
    plain = {
        "charges": [{"amount": {"value": "x", "unit": "mg"}}, {"amount": amount(), "hue": 1}],
        "notes": 3,
    }
    with pytest.raises(InvalidInput) as caught:
        entry_from_plain(plain)
    fields = {problem.field for problem in caught.value.problems}
    assert fields == {"code", "charges.1.amount.value", "charges.2.hue", "notes"}


def test_a_whole_number_beyond_floats_of_whole_numbers_can_be_stored(project: Project) -> None:
    plain = {"code": "B", "charges": [{"compound": "ester", "amount": {"value": 2**60, "unit": "nM"}}]}
    stored = log_run(user=project.created_by, project_id=project.pk, entry=entry_from_plain(plain))
    assert entry_of(stored).charges[0].amount.value == pytest.approx(2.0**60)
