"""A dataset as one tidy table: a row for each value, with its run, time, column and standard uncertainty."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator
from dataclasses import astuple, dataclass, fields
from typing import TYPE_CHECKING

from kinetics_db.datasets.selectors import dataset_by_id, items_of

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


@dataclass(frozen=True)
class TidyRow:
    """One value of one run. ``time_s`` in s, value and uncertainty in ``unit``; None is 'missing'."""

    run: str
    run_revision: int
    table: int
    time_s: float
    column: str
    value: float | None
    standard_uncertainty: float | None
    unit: str


def tidy_rows(*, user: User, dataset_id: int) -> Iterator[TidyRow]:
    """Rows of a dataset that the person may see, run by run, column by column, in order of time."""
    dataset = dataset_by_id(user=user, dataset_id=dataset_id)
    for item in items_of(dataset):
        table = item.table.table
        tabulated = table.names("standard uncertainty")
        for column in table.columns:
            if column.quantity != "concentration":
                continue
            values = table.column(column.name, "concentration")
            sigma = table.column(column.name, "standard uncertainty") if column.name in tabulated else None
            for row, (time, value) in enumerate(zip(table.times, values, strict=True)):
                yield TidyRow(
                    run=item.run_revision.run.code,
                    run_revision=item.run_revision.number,
                    table=item.table.number,
                    time_s=float(time),
                    column=column.name,
                    value=_finite(value),
                    standard_uncertainty=None if sigma is None else _finite(sigma[row]),
                    unit=column.unit,
                )


def tidy_csv(*, user: User, dataset_id: int) -> str:
    """The same rows as CSV (RFC 4180). Texts that a spreadsheet would take for a formula get a leading quote."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow([f.name for f in fields(TidyRow)])
    for row in tidy_rows(user=user, dataset_id=dataset_id):
        writer.writerow([_cell(value) for value in astuple(row)])
    return out.getvalue()


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _cell(value: object) -> object:
    if isinstance(value, float):
        return repr(value)  # all digits, so that reading it back gives the same number
    if isinstance(value, str) and value.startswith(FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value
