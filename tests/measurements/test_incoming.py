"""Bytes that wait between preview and storing, and what earlier files and recipes offer to new ones."""

from __future__ import annotations

import os
import time
from pathlib import Path
from typing import Any

import pytest

from kinetics_db.errors import InvalidInput, NotFound, NotPermitted, Unavailable
from kinetics_db.measurements import incoming
from kinetics_db.measurements.incoming import held_bytes, hold_bytes, let_go
from kinetics_db.measurements.likeness import reading_that_fits, readings_like, reductions_like, species_in
from kinetics_db.measurements.models import ConcentrationTable, SignalTable
from kinetics_db.measurements.services import preview_reduction, reduce_signals, store_file
from kinetics_db.provenance.models import AuditEntry, StoredBytes
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_member, make_project, make_user

pytestmark = pytest.mark.django_db
COMMAS = b"t / min;A / mM;B / mM\n0;1,500;0,100\n1;1,250;0,350\n"
THOUSANDS = b"t / min;A / mM;B / mM\n0;1,500;1,100\n1;1,250;1,350\n"
RECIPE: dict[str, Any] = {
    "kind": "as reported",
    "columns": [{"signal": "A", "species": "amine"}],
    "constant_u": 0.01,
}


@pytest.fixture(autouse=True)
def folder(settings: Any, tmp_path: Path) -> Path:
    settings.BYTE_STORE_DIR = tmp_path / "bytes"
    return tmp_path / "bytes" / "incoming"


@pytest.fixture
def run() -> Run:
    project = make_project()
    return make_run(project.created_by, project.pk, "R-1", {"A": Amount(45.0, "mM")})


def test_held_bytes_come_back_as_they_came_and_nothing_is_recorded(run: Run) -> None:
    entries = AuditEntry.objects.count()
    held = hold_bytes(user=run.created_by, run=run, chunks=[b"one ", b"two"])
    assert held_bytes(user=run.created_by, run=run, token=held.token).read() == b"one two"
    assert not StoredBytes.objects.exists() and AuditEntry.objects.count() == entries


def test_what_is_let_go_is_gone(run: Run, folder: Path) -> None:
    held = hold_bytes(user=run.created_by, run=run, chunks=[b"x"])
    let_go(held)
    let_go(held)
    assert not list(folder.iterdir())
    with pytest.raises(NotFound, match="not held any longer"):
        held_bytes(user=run.created_by, run=run, token=held.token)
    with pytest.raises(NotFound, match="not held any longer"):
        held.read()


def test_a_token_opens_nothing_for_another_person_or_run(run: Run) -> None:
    held = hold_bytes(user=run.created_by, run=run, chunks=[b"x"])
    colleague = make_member(run.project, "contributor")
    other = make_run(run.created_by, run.project_id, "R-2", {"A": Amount(45.0, "mM")})
    for user, of in ((colleague, run), (run.created_by, other)):
        with pytest.raises(NotFound):
            held_bytes(user=user, run=of, token=held.token)


@pytest.mark.parametrize("token", ["", "..", "../" * 11, "a/b", "x" * 32, "é" * 32, "x" * 10_000, "\0" * 32])
def test_a_token_that_was_never_given_out_opens_nothing(run: Run, token: str) -> None:
    with pytest.raises(NotFound):
        held_bytes(user=run.created_by, run=run, token=token)


def test_readers_may_not_hold_and_strangers_find_nothing(run: Run) -> None:
    with pytest.raises(NotPermitted):
        hold_bytes(user=make_member(run.project, "reader"), run=run, chunks=[b"x"])
    with pytest.raises(NotFound):
        hold_bytes(user=make_user(), run=run, chunks=[b"x"])


def test_whoever_lost_the_role_meanwhile_gets_nothing_back(run: Run) -> None:
    member = make_member(run.project, "contributor")
    held = hold_bytes(user=member, run=run, chunks=[b"x"])
    member.memberships.all().delete()
    with pytest.raises(NotFound):
        held_bytes(user=member, run=run, token=held.token)


def test_too_many_bytes_are_refused_by_their_announced_size_and_by_counting(
    run: Run, folder: Path, settings: Any
) -> None:
    settings.MAX_FILE_BYTES = 10
    for chunks, size in (([], 11), ([b"x" * 6, b"x" * 6], None)):
        with pytest.raises(InvalidInput, match="at most 10 bytes"):
            hold_bytes(user=run.created_by, run=run, chunks=chunks, size=size)
    assert not folder.exists() or not list(folder.iterdir())


def test_what_is_a_day_old_is_removed_when_the_next_file_comes(run: Run, folder: Path) -> None:
    old = hold_bytes(user=run.created_by, run=run, chunks=[b"old"])
    long_ago = time.time() - incoming.SECONDS_HELD - 10
    os.utime(old.path, (long_ago, long_ago))
    with pytest.raises(NotFound):
        held_bytes(user=run.created_by, run=run, token=old.token)
    new = hold_bytes(user=make_member(run.project, "contributor"), run=run, chunks=[b"new"])
    assert list(folder.iterdir()) == [new.path]


def test_a_person_holds_only_so_many_files(run: Run, folder: Path) -> None:
    other = hold_bytes(user=make_member(run.project, "contributor"), run=run, chunks=[b"x"])
    held = []
    for number in range(incoming.MOST_HELD + 3):
        held.append(hold_bytes(user=run.created_by, run=run, chunks=[b"x"]))
        os.utime(held[-1].path, (time.time() - 1000 + number,) * 2)
    left = set(folder.iterdir())
    assert left == {other.path, *(one.path for one in held[3:])}


def test_a_folder_that_cannot_be_written_is_said_in_words(run: Run, folder: Path) -> None:
    folder.parent.mkdir(parents=True)
    folder.write_text("a file where the folder should be")
    with pytest.raises(Unavailable, match="cannot be written"):
        hold_bytes(user=run.created_by, run=run, chunks=[b"x"])


def stored(run: Run, name: str = "R-1.csv", data: bytes = THOUSANDS, **options: Any) -> SignalTable:
    return store_file(user=run.created_by, run=run, name=name, data=data, options=options or {"decimal": ","})


def test_the_reading_of_a_file_that_looks_alike_comes_first(run: Run) -> None:
    alike = stored(run, "R-1.csv")
    stored(run, "scan.txt", sort_times=True, decimal=",")
    stored(run, "R-1.csv", COMMAS, encoding="utf-8")  # newer, and as much alike
    store_file(user=run.created_by, run=run, name="R-3.csv", data=COMMAS)  # nothing was stated
    found = readings_like(user=run.created_by, project_id=run.project_id, name="R-2.csv")
    assert [table.reader_options for table in found] == [
        {"encoding": "utf-8"},
        {"decimal": ","},
        {"decimal": ",", "sort_times": True},
    ]
    chosen = reading_that_fits(found, name="R-2.csv", data=THOUSANDS)
    assert chosen is not None and chosen.pk == alike.pk


def test_the_same_options_are_offered_once(run: Run) -> None:
    stored(run, "R-1.csv")
    newest = stored(run, "R-2.csv")
    found = readings_like(user=run.created_by, project_id=run.project_id, name="R-9.csv")
    assert [table.pk for table in found] == [newest.pk]


def test_no_reading_fits_a_file_with_other_columns(run: Run) -> None:
    found = [stored(run)]
    other = THOUSANDS.replace(b"A / mM;B / mM", b"X / mM;Y / mM")
    assert reading_that_fits(found, name="R-2.csv", data=other) is None
    assert reading_that_fits(found, name="R-2.csv", data=b"") is None


def test_stated_names_are_not_put_on_a_file_that_is_called_otherwise(run: Run) -> None:
    found = [stored(run, decimal=",", columns=["t", "A", "B"])]
    assert reading_that_fits(found, name="R-7.csv", data=THOUSANDS) is not None
    assert reading_that_fits(found, name="other.csv", data=THOUSANDS) is None


def test_strangers_learn_nothing_of_earlier_files_and_recipes(run: Run) -> None:
    stored(run)
    stranger = make_user()
    with pytest.raises(NotFound):
        readings_like(user=stranger, project_id=run.project_id, name="R-1.csv")
    with pytest.raises(NotFound):
        reductions_like(user=stranger, project_id=run.project_id, signals=["A"])
    with pytest.raises(NotFound):
        species_in(user=stranger, project_id=run.project_id)


def test_recipes_whose_signals_are_all_there_are_offered_with_their_last_run(run: Run) -> None:
    signals = stored(run)
    table = reduce_signals(user=run.created_by, signal_table=signals, name="as is", recipe=RECIPE)
    with_u = {"kind": "as reported", "columns": [{"signal": "A", "species": "A", "uncertainty_signal": "B"}]}
    both = reduce_signals(user=run.created_by, signal_table=signals, name="both", recipe=with_u)
    found = reductions_like(user=run.created_by, project_id=run.project_id, signals=["A", "B"])
    assert [reduction.pk for reduction in found] == [both.reduction_id, table.reduction_id]
    assert found[0].last_run == "R-1"
    only = reductions_like(user=run.created_by, project_id=run.project_id, signals=["A"])
    assert [reduction.pk for reduction in only] == [table.reduction_id]
    assert list(species_in(user=run.created_by, project_id=run.project_id)) == ["A", "amine"]


def test_a_reduction_is_tried_without_being_stored(run: Run) -> None:
    signals = stored(run)
    entries = AuditEntry.objects.count()
    result = preview_reduction(user=run.created_by, signal_table=signals, recipe=RECIPE)
    assert result.table.column("amine", "concentration").tolist() == pytest.approx([1.5e-3, 1.25e-3])
    assert not ConcentrationTable.objects.exists() and AuditEntry.objects.count() == entries
    with pytest.raises(NotPermitted):
        preview_reduction(user=make_member(run.project, "reader"), signal_table=signals, recipe=RECIPE)
    with pytest.raises(InvalidInput, match="there is no signal 'Z'"):
        wrong = {"kind": "as reported", "columns": [{"signal": "Z", "species": "z"}]}
        preview_reduction(user=run.created_by, signal_table=signals, recipe=wrong)
