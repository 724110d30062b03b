"""A stored table for other programs: time, then each column with its standard uncertainty beside it."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.tables import Table
from kinetics_db.exchange.tidy import FORMULA_STARTS
from kinetics_db.measurements.selectors import signal_table_by_id, table_by_id

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

ROWS_AT_ONCE = 1000


class AnyColumn(Protocol):
    """A named column of numbers, texts or truths; NaN or None is 'missing', ``unit`` is '' for what has none."""

    @property
    def name(self) -> str: ...

    @property
    def unit(self) -> str: ...

    @property
    def values(self) -> Any: ...


@dataclass(frozen=True, eq=False)
class ExportedColumn:
    """One column; ``of`` is the column whose standard uncertainty it is, else ''.

    ``values`` has shape (n,), NaN where a value is missing, in ``unit`` ('' for a pure number).
    """

    name: str
    unit: str
    values: NDArray[np.float64]
    of: str = ""


def table_columns(table: Table) -> list[ExportedColumn]:
    """Columns in the order of export: time, then each one followed by its standard uncertainty."""
    found = []
    known = table.names("standard uncertainty")
    for column in table.columns:
        if column.quantity == "standard uncertainty":
            continue
        found.append(ExportedColumn(column.name, column.unit, table.column(column.name, column.quantity)))
        if column.quantity == "concentration" and column.name in known:
            spread = table.column(column.name, "standard uncertainty")
            found.append(ExportedColumn(f"u({column.name})", column.unit, spread, of=column.name))
    return found


def table_csv(*, user: User, table_id: int) -> Iterator[str]:
    """A concentration table as CSV (RFC 4180), in pieces."""
    return csv_pieces(table_columns(table_by_id(user=user, table_id=table_id).table))


def signals_csv(*, user: User, signal_table_id: int) -> Iterator[str]:
    """A signal table as CSV, in pieces."""
    return csv_pieces(table_columns(signal_table_by_id(user=user, signal_table_id=signal_table_id).table))


def csv_pieces(columns: Sequence[AnyColumn]) -> Iterator[str]:
    """Columns as CSV with every digit; texts that a spreadsheet would take for a formula get a leading quote."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow([_cell(with_unit(column.name, column.unit)) for column in columns])
    rows = len(columns[0].values) if columns else 0
    for start in range(0, rows, ROWS_AT_ONCE):
        block = [plain_values(column.values[start : start + ROWS_AT_ONCE]) for column in columns]
        writer.writerows([_cell(value) for value in row] for row in zip(*block, strict=True))
        yield out.getvalue()
        out.seek(0)
        out.truncate()
    if not rows:
        yield out.getvalue()


def with_unit(name: str, unit: str) -> str:
    """Name and unit as 't / s' or 'A / (mol/L)', which the reader of delimited text reads again."""
    return f"{name} / ({unit})" if "/" in unit else f"{name} / {unit}" if unit else name


def plain_values(values: Iterable[Any]) -> list[Any]:
    """Values as Python has them: what is missing or not finite is None, NumPy's numbers are numbers."""
    found = values.tolist() if isinstance(values, np.ndarray) else list(values)
    return [_plain(value) for value in found]


def _plain(value: Any) -> Any:
    value = value.item() if isinstance(value, np.generic) else value
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _cell(value: Any) -> Any:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(value)  # all digits, so that reading it back gives the same number
    if isinstance(value, str) and value.startswith(FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value
