"""Freezing datasets."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset, DatasetItem
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.selectors import tables_by_id
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import recording, save_record
from kinetics_db.runs.models import RunRevision
from kinetics_db.runs.selectors import latest_revisions

FORMAT = "ratewright/dataset/1"


@dataclass(frozen=True)
class Window:
    """Which part of a table counts: times in s, columns by name (None: all), points left out with a reason."""

    start: float | None = None
    end: float | None = None
    columns: tuple[str, ...] | None = None
    left_out: Mapping[str, str] = field(default_factory=dict)
    """'column@row' (row from 0, or '*' for the whole row) -> reason"""


def freeze_dataset(
    *,
    user: User,
    project_id: int,
    name: str,
    table_ids: Sequence[int],
    windows: Mapping[int, Window] | None = None,
) -> Dataset:
    """Freeze a choice of concentration tables, each with its run's newest revision.

    The same choice under the same name gives the existing dataset. InvalidInput when tables are not of this
    project, are given twice, mix mol/L with relative concentrations, or a window leaves nothing.
    """
    require_contributor(user=user, project_id=project_id)
    name = plain_text(name, field="name", what="a dataset", longest=120, required=True)
    if not table_ids:
        raise InvalidInput(
            "the dataset has no tables", field="tables", cure="at least one concentration table"
        )
    windows = windows or {}
    with recording(user=user):
        lock_project(project_id)
        tables = tables_by_id(user=user, table_ids=table_ids)
        problems = _problems(project_id, table_ids, tables, windows)
        if problems:
            raise InvalidInput(problems)
        ordered = [tables[table_id] for table_id in table_ids]
        revisions = latest_revisions([table.run_id for table in ordered])
        _same_basis(ordered, revisions)
        content = {
            "format": FORMAT,
            "basis": ordered[0].basis,
            "items": [
                {
                    "run": revisions[table.run_id].digest,
                    "table": table.digest,
                    "reduction": table.reduction.digest,
                    "window": _plain(windows.get(table.pk, Window())),
                }
                for table in ordered
            ],
        }
        existing = Dataset.objects.filter(project_id=project_id, name=name, digest=digest(content)).first()
        if existing is not None:
            return existing
        latest = Dataset.objects.filter(project_id=project_id, name=name).order_by("-number").first()
        dataset = Dataset(
            project_id=project_id,
            name=name,
            number=(latest.number if latest else 0) + 1,
            basis=ordered[0].basis,
        )
        save_record(
            dataset,
            user=user,
            content=content,
            parents=[*(revisions[t.run_id] for t in ordered), *ordered],
            project_id=project_id,
            label=f"{name} v{dataset.number}",
            verb="froze",
        )
        DatasetItem.objects.bulk_create(
            DatasetItem(dataset=dataset, order=i, run_revision=revisions[table.run_id], table=table)
            for i, table in enumerate(ordered)
        )
    return dataset


def _leaves_something(window: Window, table: ConcentrationTable) -> bool:
    if window.columns is not None and not window.columns:
        return False
    first = -math.inf if window.start is None else window.start
    last = math.inf if window.end is None else window.end
    times = table.table.times
    return bool(((times >= first) & (times <= last)).any())


def _same_basis(tables: Sequence[ConcentrationTable], revisions: Mapping[int, RunRevision]) -> None:
    """Refuse a run charged in mol/L beside its table in percent, or the other way round."""
    problems = [
        Problem(
            f"run {table.run.code} is charged in {_words(basis)}, its table {table.number} is in {_words(table.basis)}",
            field="tables",
            cure="reduce the table to the unit of the charges, or log the charges in the unit of the table",
        )
        for table in tables
        if (basis := revisions[table.run_id].content["basis"]) != table.basis
    ]
    if problems:
        raise InvalidInput(problems)


def _words(basis: str) -> str:
    return "percent" if basis == "relative" else "mol/L"


def _plain(window: Window) -> dict[str, object]:
    return {
        "start": window.start,
        "end": window.end,
        "columns": None if window.columns is None else sorted(window.columns),
        "left_out": dict(window.left_out),
    }


def _problems(
    project_id: int,
    table_ids: Sequence[int],
    tables: Mapping[int, ConcentrationTable],
    windows: Mapping[int, Window],
) -> list[Problem]:
    found: list[Problem] = []
    for table_id in table_ids:
        if table_id not in tables or tables[table_id].run.project_id != project_id:
            found.append(Problem(f"there is no table {table_id} in this project", field="tables"))
    if found:
        return found
    if len(set(table_ids)) != len(table_ids):
        found.append(Problem("a table is given twice", field="tables", cure="each table once"))
    bases = {tables[table_id].basis for table_id in table_ids}
    if len(bases) > 1:
        found.append(
            Problem(
                "tables in mol/L and tables of relative concentrations are mixed",
                field="tables",
                cure="one kind in a dataset",
            )
        )
    for table_id, window in windows.items():
        field = f"windows.{table_id}"
        if table_id not in table_ids:
            found.append(Problem(f"a window is given for table {table_id}, which is not chosen", field=field))
            continue
        table = tables[table_id]
        names = table.table.names("concentration")
        for column in window.columns or ():
            if column not in names:
                found.append(
                    Problem(f"table {table} has no column '{column}'", field=field, cure=", ".join(names))
                )
        if not _leaves_something(window, table):
            found.append(Problem(f"the window leaves nothing of table {table}", field=field))
        for place, reason in window.left_out.items():
            column, _, row = place.rpartition("@")
            good_row = row == "*" or (row.isascii() and row.isdecimal() and int(row) < table.rows)
            if (column not in names and column != "*") or not good_row:
                found.append(
                    Problem(f"'{place}' is no point of table {table}", field=field, cure="column@row")
                )
            if not plain_text(reason, field=field):
                found.append(Problem(f"point '{place}' is left out without a reason", field=field))
    return found
