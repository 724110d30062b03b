"""A dataset as one tidy table: a row for each value, with its run, time, column and standard uncertainty."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator, Sequence
from dataclasses import astuple, dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics_db.datasets.selectors import dataset_by_id
from kinetics_db.fits.experiments import data_of, reason_left_out, rows_in_window

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

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


def tidy_rows(*, user: User, dataset_id: int) -> Iterator[TidyRow]:
    """What a dataset chooses, run by run, column by column, in order of time."""
    dataset = dataset_by_id(user=user, dataset_id=dataset_id)
    data = data_of(dataset)
    for item, run in zip(data.items, data.runs, strict=True):
        table = run.table
        tabulated = table.names("standard uncertainty")
        rows = np.flatnonzero(rows_in_window(run))
        for column in run.columns:
            values = table.column(column, "concentration")
            sigma = table.column(column, "standard uncertainty") if column in tabulated else None
            for row in rows:
                yield TidyRow(
                    run=run.code,
                    run_revision=item.run_revision.number,
                    table=item.table.number,
                    time_s=float(table.times[row]),
                    column=column,
                    value=_finite(values[row]),
                    standard_uncertainty=None if sigma is None else _finite(sigma[row]),
                    unit=table.columns[table.index(column, "concentration")].unit,
                    left_out=reason_left_out(run, column, int(row)),
                )


@dataclass(frozen=True, eq=False)
class TidyColumn:
    """One column of the tidy table; units stand in a column of their own."""

    name: str
    values: Any
    unit: str = ""


def tidy_columns(*, user: User, dataset_id: int) -> list[TidyColumn]:
    """The same rows, column by column."""
    rows = list(tidy_rows(user=user, dataset_id=dataset_id))
    floats = ("time_s", "value", "standard_uncertainty")
    found = []
    for f in fields(TidyRow):
        values: Sequence[Any] = [getattr(row, f.name) for row in rows]
        found.append(TidyColumn(f.name, np.array(values, dtype=float) if f.name in floats else values))
    return found


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
    return float(value) if math.isfinite(value) else None


def _cell(value: object) -> object:
    if isinstance(value, float):
        return repr(value)  # all digits, so that reading it back gives the same number
    if isinstance(value, str) and value.startswith(FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value
