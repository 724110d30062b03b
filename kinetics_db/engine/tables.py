"""Tables of numbers with named, unit-carrying columns, and their canonical bytes.

The bytes are a canonical JSON header (RFC 8785), a newline, and the values as little-endian float64 in
row-major order. Equal tables have equal bytes on every platform; missing values are NaN with one fixed
bit pattern; -0.0 is written as 0.0.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.canonical import canonical_json
from kinetics_db.errors import InvalidInput

FORMAT = "ratewright/table/1"
MAX_VALUES = 50_000_000


@dataclass(frozen=True)
class Column:
    """One column. ``quantity`` is 'time', 'signal', 'concentration' or 'standard uncertainty'.

    For 'standard uncertainty' the ``name`` is that of the column it belongs to. ``unit`` is a unit of
    `kinetics_db.engine.units` or '' for a pure number.
    """

    name: str
    unit: str
    quantity: str


@dataclass(frozen=True, eq=False)
class Table:
    """Named columns over a 2-D array.

    Attributes
    ----------
    columns : tuple of Column, length m; (name, quantity) pairs are unique
    values : ndarray, shape (n, m), float64, read-only; NaN is 'missing', infinities are refused
    """

    columns: tuple[Column, ...]
    values: NDArray[np.float64]

    def __post_init__(self) -> None:
        values = np.array(self.values, dtype=np.float64, order="C", copy=True)
        if values.ndim != 2 or values.shape[1] != len(self.columns):
            raise InvalidInput(
                f"a table with {len(self.columns)} columns got values of shape {values.shape}",
                cure="one value per row and column",
            )
        if values.size > MAX_VALUES:
            raise InvalidInput(
                f"a table of {values.size} values is too large", cure=f"at most {MAX_VALUES} values"
            )
        if np.isinf(values).any():
            row, col = np.argwhere(np.isinf(values))[0]
            raise InvalidInput(
                f"infinite value in row {row + 1} of column '{self.columns[col].name}'",
                cure="finite or missing",
            )
        keys = [(c.name, c.quantity) for c in self.columns]
        if len(set(keys)) != len(keys):
            double = next(k for k in keys if keys.count(k) > 1)
            raise InvalidInput(f"column '{double[0]}' ({double[1]}) stands twice", cure="unique column names")
        values[np.isnan(values)] = np.nan  # one bit pattern for 'missing'
        values += 0.0  # -0.0 -> 0.0
        values.setflags(write=False)
        object.__setattr__(self, "values", values)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Table) and self.to_bytes() == other.to_bytes()

    __hash__ = None  # type: ignore[assignment]

    @property
    def rows(self) -> int:
        return int(self.values.shape[0])

    def names(self, quantity: str) -> tuple[str, ...]:
        """Names of the columns of that quantity, in order."""
        return tuple(c.name for c in self.columns if c.quantity == quantity)

    def index(self, name: str, quantity: str) -> int:
        """Position of a column; KeyError when absent."""
        for i, column in enumerate(self.columns):
            if (column.name, column.quantity) == (name, quantity):
                return i
        raise KeyError((name, quantity))

    def column(self, name: str, quantity: str) -> NDArray[np.float64]:
        """Values of one column, shape (n,); KeyError when absent."""
        return self.values[:, self.index(name, quantity)]

    @property
    def times(self) -> NDArray[np.float64]:
        """The (only) time column, shape (n,), in that column's unit."""
        return self.column(self.names("time")[0], "time")

    def to_bytes(self) -> bytes:
        """Canonical bytes; equal tables give equal bytes."""
        header = canonical_json(
            {
                "format": FORMAT,
                "rows": self.rows,
                "columns": [{"name": c.name, "quantity": c.quantity, "unit": c.unit} for c in self.columns],
            }
        )
        return header + b"\n" + self.values.astype("<f8").tobytes(order="C")

    @classmethod
    def from_bytes(cls, data: bytes) -> Table:
        """Inverse of `to_bytes`; InvalidInput when the bytes are not such a table."""
        try:
            head, _, body = data.partition(b"\n")
            header = json.loads(head)
            if header["format"] != FORMAT:
                raise ValueError(header["format"])
            columns = tuple(Column(c["name"], c["unit"], c["quantity"]) for c in header["columns"])
            values = np.frombuffer(body, dtype="<f8").reshape(int(header["rows"]), len(columns))
        except (ValueError, KeyError, TypeError) as error:
            raise InvalidInput(f"not a stored table: {error}") from error
        return cls(columns, values.astype(np.float64))


def table(columns: Sequence[tuple[str, str, str]], values: object) -> Table:
    """Short form: ``table([("t", "s", "time"), ...], rows)``."""
    return Table(tuple(Column(*c) for c in columns), np.asarray(values, dtype=np.float64))
