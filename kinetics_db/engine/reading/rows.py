"""Rows of cells to numbers: fast where a block is plain, cell by cell where it is not."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.reading.cells import Clock, number_cell, time_cell
from kinetics_db.engine.reading.layout import Layout, split_line
from kinetics_db.engine.units import convert
from kinetics_db.errors import InvalidInput, Problem

BLOCK = 5_000
MAX_PROBLEMS = 20
_PLAIN = frozenset("0123456789+-.,eE;|\t ")

CellNote = tuple[int, int, str]


@dataclass
class Rows:
    """Values, shape (n, width), time in s; (line, column from 0, text) of the cells that are no number.

    ``one_colon`` holds (row, line, text) of the times with one colon where the clock is open;
    ``trailing`` the most cells that a row had beyond the last column, all empty.
    """

    values: NDArray[np.float64]
    missing: list[CellNote] = field(default_factory=list)
    limits: list[CellNote] = field(default_factory=list)
    one_colon: list[CellNote] = field(default_factory=list)
    own_units: int = 0
    trailing: int = 0


def read_rows(
    lines: Sequence[str],
    numbers: NDArray[np.int64],
    layout: Layout,
    time: int,
    clock: Clock,
    skipped: frozenset[int],
    *,
    cut_short: bool,
) -> Rows:
    """Read all rows.

    Raises
    ------
    InvalidInput
        with up to 20 problems, each with its line and column.
    """
    rows = Rows(np.full((len(lines), layout.width), np.nan))
    problems: list[Problem] = []
    for start in range(0, len(lines), BLOCK):
        block = lines[start : start + BLOCK]
        fast = None if skipped or not clock.unit else _fast(block, layout)
        if fast is not None:
            fast[:, time] = convert(fast[:, time], clock.unit, "s")
            rows.values[start : start + len(block)] = fast
            continue
        for offset, line in enumerate(block):
            number = int(numbers[start + offset])
            last = cut_short and start + offset == len(lines) - 1
            _read_row(line, number, layout, (time, clock, skipped), rows, start + offset, problems, last)
            if len(problems) >= MAX_PROBLEMS:
                raise InvalidInput(problems)
    if problems:
        raise InvalidInput(problems)
    return rows


def _fast(block: Sequence[str], layout: Layout) -> NDArray[np.float64] | None:
    """A block of nothing but plain numbers, read by NumPy; None when any cell needs a closer look."""
    text = "\n".join(block)
    if not set(text) <= (_PLAIN | {"\n"}):
        return None
    if layout.decimal == ",":
        if "." in text or layout.delimiter == ",":
            return None
        block = text.replace(",", ".").split("\n")
    try:
        delimiter = None if layout.delimiter == " " else layout.delimiter
        values: NDArray[np.float64] = np.loadtxt(block, delimiter=delimiter, comments=None, ndmin=2)
    except ValueError:
        return None
    if values.shape != (len(block), layout.width) or not np.isfinite(values).all():
        return None
    return values


def _read_row(
    line: str,
    number: int,
    layout: Layout,
    columns: tuple[int, Clock, frozenset[int]],
    rows: Rows,
    row: int,
    problems: list[Problem],
    last: bool,
) -> None:
    time, clock, skipped = columns
    try:
        cells = split_line(line, layout.delimiter, number)
    except InvalidInput as error:
        problems.extend(error.problems)
        return
    beyond = len(cells) - layout.width
    if beyond > 0 and not any(cells[layout.width :]):
        del cells[layout.width :]
        rows.trailing = max(rows.trailing, beyond)
    if len(cells) != layout.width:
        message = f"the row has {len(cells)} cells instead of {layout.width}"
        if last and len(cells) < layout.width:
            message += ", and the file ends without a line end: it seems cut short"
        problems.append(Problem(message, line=number, cure="the same number of cells in every row"))
        return
    for column, text in enumerate(cells):
        if column in skipped:
            continue
        if column == time:
            cell = time_cell(text, layout.decimal, clock)
            if clock.is_open and cell.kind == "number" and text.count(":") == 1:
                rows.one_colon.append((row, number, text))
            rows.own_units += ":" in text or text[-1:].isalpha()
        else:
            cell = number_cell(text, layout.decimal)
        if cell.kind == "number":
            rows.values[row, column] = cell.value
        elif cell.kind == "missing":
            rows.missing.append((number, column, text))
        elif cell.kind == "limit":
            rows.limits.append((number, column, text))
        else:
            name = layout.header[column] if column < len(layout.header) else str(column + 1)
            shown = text if len(text) <= 40 else text[:40] + "..."
            message = f"'{shown}' in column '{name}' {cell.why}"
            cure = "a number, or an empty cell, '-' or 'n.d.' where none was measured"
            problems.append(Problem(message, line=number, column=column + 1, cure=cure))
