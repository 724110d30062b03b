"""Reads about files, tables and reductions."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.errors import NotFound
from kinetics_db.measurements.models import ConcentrationTable, SignalTable
from kinetics_db.measurements.selectors import (
    files_of_run,
    reductions_in,
    signal_tables_of_run,
    table_by_id,
    tables_of_run,
)
from kinetics_db.measurements.services import reduce_signals, store_file, supersede_table
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_member, make_project, make_user
from tests.factories.small import SmallStudy, make_study

FILE = lines(["t / s", "A / mM", "B / mM"], [0, 10, 0], [60, 6, 4], [120, 4, 6])


@pytest.fixture
def study(db: None) -> SmallStudy:
    """R-1 with three tables, of which the second supersedes the first; R-2 with one."""
    found = make_study()
    older = found.tables[0]
    newer = make_reported_table(found.user, older.run, FILE, {"A": "A"}, name="again.csv")
    make_reported_table(found.user, older.run, FILE, {"A": "A", "B": "B"}, name="third.csv")
    supersede_table(user=found.user, older=older, newer=newer, reason="baseline")
    return found


def test_tables_of_a_run_say_what_supersedes_them(study: SmallStudy) -> None:
    run = study.tables[0].run
    with CaptureQueriesContext(connection) as queries:
        tables = list(tables_of_run(user=study.user, run=run))
        told = [
            (table.number, getattr(table, "superseded_by", None) and table.superseded_by.newer.number)
            for table in tables
        ]
        named = {
            (table.reduction.name, table.signal_table.file.name, table.created_by.pk) for table in tables
        }
    assert told == [(3, None), (2, None), (1, 2)]
    assert named == {("as reported", name, study.user.pk) for name in ("R-1.csv", "again.csv", "third.csv")}
    assert len(queries) == 2  # the role, and the tables
    assert "blob" in tables[0].get_deferred_fields()


def test_the_numbers_of_tables_are_loaded_where_asked_for(study: SmallStudy) -> None:
    tables = list(tables_of_run(user=study.user, run=study.tables[0].run, numbers=True))
    with CaptureQueriesContext(connection) as queries:
        assert [table.table.rows for table in tables] == [3, 3, 12]
    assert len(queries) == 0


def test_one_table_comes_with_all_that_it_was_made_from(study: SmallStudy) -> None:
    with CaptureQueriesContext(connection) as queries:
        table = table_by_id(user=study.user, table_id=study.tables[0].pk)
        about = (
            table.run.project.slug,
            table.reduction.name,
            table.signal_table.file.stored.sha256,
            table.superseded_by.newer.run.code,
            table.created_by.username,
        )
    assert about[0] == study.project.slug and about[3] == "R-1"
    assert len(queries) == 2


def test_files_of_a_run_come_newest_first_with_their_signals(study: SmallStudy) -> None:
    run = study.tables[0].run
    store_file(user=study.user, run=run, name="R-1.csv", data=FILE.encode(), options={"time_unit": "s"})
    with CaptureQueriesContext(connection) as queries:
        told = [
            (file.name, file.stored.size, [signals.number for signals in file.signal_tables.all()])
            for file in files_of_run(user=study.user, run=run)
        ]
    assert [name for name, *_ in told] == ["R-1.csv", "third.csv", "again.csv", "R-1.csv"]
    assert told[0][1:] == (len(FILE), [1])
    assert len(queries) == 3
    assert [s.file.name for s in signal_tables_of_run(user=study.user, run=run)] == [
        name for name, *_ in told
    ]


def test_each_reduction_is_offered_in_its_newest_version(study: SmallStudy) -> None:
    signals = SignalTable.objects.filter(file__name="third.csv").get()
    recipe = {"kind": "as reported", "columns": [{"signal": "B", "species": "B"}]}
    reduce_signals(user=study.user, signal_table=signals, name="only B", recipe=recipe)
    told = [(r.name, r.number) for r in reductions_in(user=study.user, project_id=study.project.pk)]
    newest = max(
        table.reduction.number for table in ConcentrationTable.objects.filter(reduction__name="as reported")
    )
    assert newest > 1
    assert told == [("as reported", newest), ("only B", 1)]


def test_a_run_without_files_has_none(study: SmallStudy) -> None:
    run = make_run(study.user, study.project.pk, "R-9", {"A": Amount(1, "mM")})
    assert not list(files_of_run(user=study.user, run=run))
    assert not list(tables_of_run(user=study.user, run=run))


@pytest.mark.parametrize(
    "read",
    [
        lambda user, run: tables_of_run(user=user, run=run),
        lambda user, run: files_of_run(user=user, run=run),
        lambda user, run: signal_tables_of_run(user=user, run=run),
        lambda user, run: reductions_in(user=user, project_id=run.project_id),
        lambda user, run: table_by_id(user=user, table_id=run.concentration_tables.first().pk),
    ],
)
def test_readers_may_look_and_strangers_may_not(study: SmallStudy, read: Callable[[Any, Run], Any]) -> None:
    run = study.tables[0].run
    assert read(make_member(study.project, "reader"), run)
    for stranger in (make_user(), make_project().created_by):
        with pytest.raises(NotFound):
            read(stranger, run)


@pytest.mark.parametrize("table_id", [0, 10**9, 10**30])
def test_a_table_that_is_not_there_is_not_found(study: SmallStudy, table_id: int) -> None:
    with pytest.raises(NotFound):
        table_by_id(user=study.user, table_id=table_id)
