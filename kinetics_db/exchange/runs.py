"""A list of runs for other programs: a line for each with its conditions and start concentrations."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from typing import TYPE_CHECKING

from kinetics_db.exchange.tidy import FORMULA_STARTS
from kinetics_db.materials.selectors import material_names
from kinetics_db.measurements.rows import RunRow, run_rows
from kinetics_db.paging import LARGEST_SIZE, page_of
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found

if TYPE_CHECKING:
    from django.db.models import QuerySet

    from kinetics_db.accounts.models import User
    from kinetics_db.runs.models import Run

HEADINGS = (
    "code", "logged", "logged by", "temperature / K", "u(temperature) / K", "control", "replicate of", "sealed",
    "files", "tables", "basis",
)  # fmt: skip


def runs_csv(*, user: User, project_id: int, query: RunQuery, order: str = "newest") -> Iterator[str]:
    """The runs of a project that match, all pages of them, as CSV (RFC 4180) in pieces.

    After the conditions comes a pair of columns for each compound of the project: its start concentration and
    the standard uncertainty of it, in mol/L or percent as the column 'basis' says. Times are in UTC.
    """
    compounds = material_names(user=user, project_id=project_id).compounds
    found = runs_found(user=user, query=query, project_id=project_id)
    return _pieces(found, RUN_ORDERS[order], compounds)


def _pieces(found: QuerySet[Run], order: tuple[str, ...], compounds: tuple[str, ...]) -> Iterator[str]:
    pairs = [heading for name in compounds for heading in (f"[{name}]0", f"u([{name}]0)")]
    yield _csv([[*HEADINGS, *pairs]])
    cursor: str | None = ""
    while cursor is not None:
        page = page_of(found, order=order, cursor=cursor, size=LARGEST_SIZE)
        yield _csv([_line(row, compounds) for row in run_rows(page.items, numbers=False)])
        cursor = page.next


def _line(row: RunRow, compounds: tuple[str, ...]) -> list[object]:
    run = row.run
    starts = {part.compound: part for part in row.starts}
    line: list[object] = [
        run.code,
        run.created.isoformat(),
        run.created_by.username,
        row.temperature,
        row.temperature_u,
        run.control_kind,
        run.replicate_of.code if run.replicate_of is not None else "",
        run.sealed.isoformat() if run.sealed is not None else "",
        row.files,
        row.tables,
        row.basis,
    ]
    for name in compounds:
        part = starts.get(name)
        line += [None, None] if part is None else [part.value, part.standard_uncertainty]
    return line


def _csv(lines: list[list[object]]) -> str:
    out = io.StringIO()
    csv.writer(out).writerows([[_cell(value) for value in line] for line in lines])
    return out.getvalue()


def _cell(value: object) -> object:
    """Texts that a spreadsheet would take for a formula get a leading quote; numbers keep every digit."""
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, str) and value.startswith(FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value
