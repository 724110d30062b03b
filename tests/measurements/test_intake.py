"""From instrument bytes to concentration tables."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from django.conf import settings

from kinetics_db.engine.canonical import sha256_hex
from kinetics_db.engine.tables import Table
from kinetics_db.errors import InvalidInput, NotFound, NotPermitted, Unavailable
from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile, Reduction, SignalTable
from kinetics_db.measurements.selectors import bytes_of, file_by_id
from kinetics_db.measurements.services import preview_file, reduce_signals, store_file, supersede_table
from kinetics_db.provenance.models import AuditEntry, StoredBytes
from kinetics_db.provenance.selectors import path_of
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_member, make_project

pytestmark = pytest.mark.django_db
FILE = b"t / min;I(A) / a.u.;I(std) / a.u.\n0;9,0;12,0\n1;4,5;12,0\n2;;12,0\n"
RECIPE: dict[str, Any] = {
    "kind": "internal standard",
    "standard": {"signal": "I(std)", "species": "standard", "nuclei": 3},
    "standard_concentration": 0.02,
    "standard_relative_u": 0.01,
    "standard_owner": "standard S-1",
    "signals": [{"signal": "I(A)", "species": "A", "nuclei": 1}],
    "noise_absolute": 0.05,
}


@pytest.fixture
def run() -> Run:
    project = make_project()
    return make_run(project.created_by, project.pk, "R-1", {"A": Amount(45.0, "mM")})


def store(run: Run, data: bytes = FILE, name: str = "R-1.txt", **more: Any) -> SignalTable:
    return store_file(user=run.created_by, run=run, name=name, data=data, **more)


def test_bytes_are_kept_under_their_hash_as_they_came(run: Run) -> None:
    file = store(run).file
    assert file.stored.sha256 == sha256_hex(FILE)
    assert bytes_of(file_by_id(user=run.created_by, file_id=file.pk)) == FILE
    assert path_of(file.stored.sha256).is_relative_to(Path(settings.BYTE_STORE_DIR))


def test_a_changed_stored_file_is_not_given_out(run: Run) -> None:
    file = store(run, b"t / s,A / mM\n0,1\n1,2\n", "other.csv").file
    path = path_of(file.stored.sha256)
    path.chmod(0o644)
    path.write_bytes(b"changed")
    with pytest.raises(Unavailable, match="has been changed"):
        bytes_of(file)
    path.unlink()
    with pytest.raises(NotFound, match="cannot be read"):
        bytes_of(file)


def test_the_same_upload_again_gives_the_existing_table(run: Run) -> None:
    first = store(run)
    again = store(run)
    assert again.pk == first.pk
    assert (InstrumentFile.objects.count(), StoredBytes.objects.count()) == (1, 1)


def test_the_same_bytes_for_another_run_are_kept_once(run: Run) -> None:
    other = make_run(run.created_by, run.project_id, "R-2", {"A": Amount(45.0, "mM")})
    store(run)
    store(other)
    assert (InstrumentFile.objects.count(), StoredBytes.objects.count()) == (2, 1)


def test_a_preview_stores_nothing(run: Run) -> None:
    before = AuditEntry.objects.count()
    result = preview_file(user=run.created_by, run=run, data=FILE)
    assert result.table.rows == 3 and result.notes
    assert not StoredBytes.objects.exists() and AuditEntry.objects.count() == before


@pytest.mark.parametrize(
    ("data", "says"),
    [(b"", "empty"), (b"PK\x03\x04" + b"\x00" * 40, ""), (b"t / min;A\n0;1\n1;x1\n", "line 3")],
)
def test_a_file_that_cannot_be_read_leaves_nothing_behind(run: Run, data: bytes, says: str) -> None:
    before = AuditEntry.objects.count()
    with pytest.raises(InvalidInput) as refused:
        store(run, data)
    assert says in str(refused.value)
    assert not StoredBytes.objects.exists() and not InstrumentFile.objects.exists()
    assert AuditEntry.objects.count() == before


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("", "needs a name"),
        ("a/b.txt", "is a path"),
        ("a\\b", "is a path"),
        ("x" * 256, "at most 255"),
        ("a\tb", "U\\+0009"),
    ],
)
def test_a_file_name_that_could_be_a_path_is_refused(run: Run, name: str, says: str) -> None:
    with pytest.raises(InvalidInput, match=says):
        store(run, name=name)


def test_a_file_that_is_too_large_is_refused_before_it_is_parsed(run: Run, settings: Any) -> None:
    settings.MAX_FILE_BYTES = 10
    for take in (preview_file, lambda **given: store_file(**given, name="x.txt")):
        with pytest.raises(InvalidInput, match="at most 10 bytes"):
            take(user=run.created_by, run=run, data=FILE)


def test_an_unknown_option_is_refused(run: Run) -> None:
    with pytest.raises(InvalidInput, match="unknown option 'colour'"):
        store(run, options={"colour": "red"})


def test_signals_become_concentrations_against_the_standard(run: Run) -> None:
    table = reduce_signals(user=run.created_by, signal_table=store(run), name="1H", recipe=RECIPE)
    assert (table.basis, table.rows, table.first_time, table.last_time) == ("mol/L", 3, 0.0, 120.0)
    # 0.02 mol/L x (9/1)/(12/3) = 0.045 mol/L
    values = table.table.column("A", "concentration")
    np.testing.assert_allclose(values[:2], [0.045, 0.0225], rtol=1e-14)
    assert np.isnan(values[2])
    sigma = table.table.column("A", "standard uncertainty")
    # u(c)/c = hypot(0.05/9, 0.05/12), JCGM 100:2008, 5.1.6
    assert sigma[0] / values[0] == pytest.approx(np.hypot(0.05 / 9, 0.05 / 12), rel=1e-12)
    assert table.scale_errors == [{"owner": "standard S-1", "relative_u": 0.01, "columns": ["A"]}]
    assert [(c.name, c.unit, c.values) for c in table.columns.all()] == [("A", "mol/L", 2)]


def test_a_stored_table_reads_back_bit_for_bit(run: Run) -> None:
    table = reduce_signals(user=run.created_by, signal_table=store(run), name="1H", recipe=RECIPE)
    stored = ConcentrationTable.objects.get(pk=table.pk)
    assert stored.table == table.table
    assert Table.from_bytes(bytes(stored.blob)).to_bytes() == bytes(table.blob)
    assert stored.content["table"] == sha256_hex(bytes(stored.blob))
    assert (
        stored.digest
        == sha256_hex(bytes(stored.canonical))
        == "f312e2c3231b31d4350986308ad603527efb6e0bedcdb24ca62a635e89f91f5b"
    )


def test_the_scale_errors_that_a_fit_reads_are_covered_by_the_digest(run: Run) -> None:
    table = reduce_signals(user=run.created_by, signal_table=store(run), name="1H", recipe=RECIPE)
    assert table.content["scale_errors"] == table.scale_errors != []


def test_the_same_recipe_again_is_the_same_version_and_table(run: Run) -> None:
    signals = store(run)
    first = reduce_signals(user=run.created_by, signal_table=signals, name="1H", recipe=RECIPE)
    again = reduce_signals(
        user=run.created_by, signal_table=signals, name="1H", recipe=dict(reversed(RECIPE.items()))
    )
    changed = reduce_signals(
        user=run.created_by, signal_table=signals, name="1H", recipe={**RECIPE, "noise_absolute": 0.1}
    )
    assert again.pk == first.pk
    assert (changed.number, changed.reduction.number) == (2, 2)


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"kind": "guess"}, "no recipe of kind 'guess'"),
        ({"standard_concentration": -1}, "standard_concentration"),
        ({"signals": [{"signal": "I(B)", "species": "B", "nuclei": 1}]}, "no signal 'I(B)'"),
        ({"signals": [{"signal": "I(A)", "species": "A", "nuclei": 0}]}, "nuclei"),
    ],
)
def test_a_recipe_that_cannot_be_used_stores_nothing(run: Run, changes: dict[str, Any], says: str) -> None:
    signals = store(run)
    with pytest.raises(InvalidInput) as refused:
        reduce_signals(user=run.created_by, signal_table=signals, name="1H", recipe={**RECIPE, **changes})
    assert says in str(refused.value)
    assert not Reduction.objects.exists() and not ConcentrationTable.objects.exists()


def test_a_table_is_superseded_with_a_reason_only_by_a_newer_one_of_its_run(run: Run) -> None:
    user = run.created_by
    signals = store(run)
    older = reduce_signals(user=user, signal_table=signals, name="1H", recipe=RECIPE)
    newer = reduce_signals(
        user=user, signal_table=signals, name="1H", recipe={**RECIPE, "noise_absolute": 0.1}
    )
    with pytest.raises(InvalidInput, match="not newer"):
        supersede_table(user=user, older=newer, newer=older, reason="x")
    with pytest.raises(InvalidInput, match="no reason"):
        supersede_table(user=user, older=older, newer=newer, reason=" ")
    supersede_table(user=user, older=older, newer=newer, reason="noise was measured")
    assert older.superseded_by.newer == newer


def test_a_reader_may_not_upload(run: Run) -> None:
    with pytest.raises(NotPermitted):
        store_file(user=make_member(run.project, "reader"), run=run, name="x.txt", data=FILE)
