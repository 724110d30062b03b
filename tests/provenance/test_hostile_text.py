"""Texts that a database refuses or people cannot tell apart: refused with their field, or brought to one form."""

from __future__ import annotations

import unicodedata
from collections.abc import Callable
from typing import Any

import pytest

from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.errors import InvalidInput
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.services import create_project
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.services import log_run
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db
HOSTILE = {"NUL": "a\x00b", "half a character": "a\ud800b", "too long": "x" * 100_001, "a number": 7}


def writes(study: SmallStudy, text: Any) -> dict[str, Callable[[], Any]]:
    """Every service that takes a name or a note, with the text in its place."""
    where = {"user": study.user, "project_id": study.project.pk}
    run, table = study.tables[0].run, study.tables[0]
    charges = [ChargeEntry(Amount(1.0, "mM"), compound="A")]
    recipe = {"kind": "as reported", "columns": [{"signal": "A", "species": "A"}]}
    return {
        "project name": lambda: create_project(user=study.user, slug="other", name=text),
        "project description": lambda: create_project(
            user=study.user, slug="other", name="x", description=text
        ),
        "project slug": lambda: create_project(user=study.user, slug=text, name="x"),
        "compound name": lambda: enter_compound(**where, name=text),
        "compound formula": lambda: enter_compound(**where, name="new", formula=text),
        "compound reason": lambda: enter_compound(**where, name="new", reason=text),
        "lot code": lambda: enter_lot(**where, code=text, compound="A"),
        "lot compound": lambda: enter_lot(**where, code="L", compound=text),
        "stock code": lambda: make_up_stock(
            **where, code=text, portions=[Portion(1.0, "g", compound="A")], volume=(1.0, "L")
        ),
        "stock portion": lambda: make_up_stock(
            **where, code="S", portions=[Portion(1.0, "g", compound=text)], volume=(1.0, "L")
        ),
        "run code": lambda: log_run(**where, entry=RunEntry(text, charges)),
        "run notes": lambda: log_run(**where, entry=RunEntry("R-9", charges, notes=text)),
        "run atmosphere": lambda: log_run(**where, entry=RunEntry("R-9", charges, atmosphere=text)),
        "run section": lambda: log_run(
            **where, entry=RunEntry("R-9", charges, sections={"vessel": {"name": text}})
        ),
        "charge compound": lambda: log_run(
            **where, entry=RunEntry("R-9", [ChargeEntry(Amount(1.0, "mM"), compound=text)])
        ),
        "charge note": lambda: log_run(
            **where, entry=RunEntry("R-9", [ChargeEntry(Amount(1.0, "mM"), compound="A", note=text)])
        ),
        "file name": lambda: store_file(user=study.user, run=run, name=text, data=b"t / s,A / mM\n0,1\n"),
        "reduction name": lambda: reduce_signals(
            user=study.user, signal_table=table.signal_table, name=text, recipe=recipe
        ),
        "species": lambda: reduce_signals(
            user=study.user,
            signal_table=table.signal_table,
            name="r",
            recipe={**recipe, "columns": [{"signal": "A", "species": text}]},
        ),
        "mechanism name": lambda: write_version(**where, name=text, text="A --k--> C"),
        "mechanism note": lambda: write_version(**where, name="m", text="A --k--> C", note=text),
        "dataset name": lambda: freeze_dataset(**where, name=text, table_ids=[table.pk]),
    }


@pytest.mark.parametrize("kind", HOSTILE)
def test_hostile_text_is_refused_everywhere_and_stores_nothing(kind: str) -> None:
    study = make_study()
    before = AuditEntry.objects.count()
    for place, write in writes(study, HOSTILE[kind]).items():
        with pytest.raises(InvalidInput) as refused:
            write()
        assert refused.value.problems[0].field or refused.value.problems[0].line, place
        assert AuditEntry.objects.count() == before, place


def test_two_writings_of_one_name_are_one_name() -> None:
    study = make_study()
    composed, apart = unicodedata.normalize("NFC", "éther"), unicodedata.normalize("NFD", "éther")
    assert composed != apart
    where = {"user": study.user, "project_id": study.project.pk}
    first = enter_compound(**where, name=composed, molar_mass=74.0)
    assert enter_compound(**where, name=f" {apart} ", molar_mass=74.0).pk == first.pk
    stock = make_up_stock(**where, code="S", portions=[Portion(1.0, "g", compound=apart)], volume=(1.0, "L"))
    assert stock.content["components"][0]["compound"] == composed
    run = log_run(**where, entry=RunEntry("R-9", [ChargeEntry(Amount(1.0, "mM"), compound=apart)]))
    assert run.content["start"][0]["compound"] == composed
