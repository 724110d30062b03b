"""A dataset as one tidy table: a row for each value, with its run, time, column and standard uncertainty."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator, Sequence
from dataclasses import astuple, dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from kinetics_db.datasets.selectors import dataset_by_id, numbers_of
from kinetics_db.engine.tables import Table
from kinetics_db.fits.experiments import RunOfFit, reason_left_out, rows_in_window
from kinetics_db.projects.selectors import require_reader

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.datasets.models import Dataset

Floats = NDArray[np.float64]
ROWS_AT_ONCE = 1000
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


@dataclass(frozen=True)
class TidyRow:
    """One value of one run. ``time_s`` in s, value and uncertainty in ``unit``; None is 'missing'.

    ``left_out`` is the reason why the dataset leaves the point out, else empty.
    """

    run: str
    run_revision: int
    table: int
    time_s: float
    column: str
    value: float | None
    standard_uncertainty: float | None
    unit: str
    left_out: str


@dataclass(frozen=True, eq=False)
class _Piece:
    """One column of one run's table: what is the same for all its values, and the values, shape (n,), NaN 'missing'."""

    run: str
    run_revision: int
    table: int
    column: str
    unit: str
    times: Floats
    values: Floats
    sigmas: Floats
    left_out: Sequence[str]


def _pieces(dataset: Dataset) -> Iterator[_Piece]:
    for item, frozen in zip(numbers_of(dataset), dataset.content["items"], strict=True):
        table = Table.from_bytes(bytes(item.blob))
        run = RunOfFit(item.code, {}, table, (), frozen["window"])
        tabulated = table.names("standard uncertainty")
        rows = np.flatnonzero(rows_in_window(run))
        missing = np.full(rows.size, np.nan)
        for column in run.columns:
            yield _Piece(
                run=run.code,
                run_revision=item.run_revision,
                table=item.table,
                column=column,
                unit=table.columns[table.index(column, "concentration")].unit,
                times=table.times[rows],
                values=table.column(column, "concentration")[rows],
                sigmas=table.column(column, "standard uncertainty")[rows] if column in tabulated else missing,
                left_out=_reasons(run, column, rows.tolist()),
            )


def _reasons(run: RunOfFit, column: str, rows: Sequence[int]) -> Sequence[str]:
    if not run.window["left_out"]:
        return [""] * len(rows)
    return [reason_left_out(run, column, row) for row in rows]


def tidy_rows(*, user: User, dataset_id: int) -> Iterator[TidyRow]:
    """What a dataset chooses, run by run, column by column, in order of time."""
    for piece in _pieces(dataset_by_id(user=user, dataset_id=dataset_id)):
        numbers = (piece.times.tolist(), piece.values.tolist(), piece.sigmas.tolist(), piece.left_out)
        for time, value, sigma, reason in zip(*numbers, strict=True):
            yield TidyRow(
                run=piece.run,
                run_revision=piece.run_revision,
                table=piece.table,
                time_s=time,
                column=piece.column,
                value=_finite(value),
                standard_uncertainty=_finite(sigma),
                unit=piece.unit,
                left_out=reason,
            )


@dataclass(frozen=True, eq=False)
class TidyColumn:
    """One column of the tidy table; units stand in a column of their own."""

    name: str
    values: Any
    unit: str = ""


def tidy_columns(*, user: User, dataset: Dataset) -> list[TidyColumn]:
    """The same rows, column by column: an array for what is measured, a list for what is named."""
    require_reader(user=user, project_id=dataset.project_id)
    pieces = list(_pieces(dataset))

    def repeated(name: str) -> list[Any]:
        return [value for piece in pieces for value in [getattr(piece, name)] * piece.times.size]

    def joined(name: str) -> Floats:
        found = np.concatenate([np.empty(0), *(getattr(piece, name) for piece in pieces)])
        return np.where(np.isfinite(found), found, np.nan)

    return [
        TidyColumn("run", repeated("run")),
        TidyColumn("run_revision", repeated("run_revision")),
        TidyColumn("table", repeated("table")),
        TidyColumn("time_s", joined("times")),
        TidyColumn("column", repeated("column")),
        TidyColumn("value", joined("values")),
        TidyColumn("standard_uncertainty", joined("sigmas")),
        TidyColumn("unit", repeated("unit")),
        TidyColumn("left_out", [reason for piece in pieces for reason in piece.left_out]),
    ]


def tidy_csv(*, user: User, dataset_id: int) -> str:
    """The same rows as CSV (RFC 4180). Texts that a spreadsheet would take for a formula get a leading quote."""
    return "".join(tidy_csv_pieces(user=user, dataset_id=dataset_id))


def tidy_csv_pieces(*, user: User, dataset_id: int) -> Iterator[str]:
    """`tidy_csv` in pieces, to be sent while it is written."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow([f.name for f in fields(TidyRow)])
    for number, row in enumerate(tidy_rows(user=user, dataset_id=dataset_id), start=1):
        writer.writerow([_cell(value) for value in astuple(row)])
        if number % ROWS_AT_ONCE == 0:
            yield out.getvalue()
            out.seek(0)
            out.truncate()
    yield out.getvalue()


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _cell(value: object) -> object:
    if isinstance(value, float):
        return repr(value)  # all digits, so that reading it back gives the same number
    if isinstance(value, str) and value.startswith(FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value
