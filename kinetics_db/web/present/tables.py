"""Stored tables as pages show them: the first and last rows as text, and charts of signals."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from kinetics_db.engine.shown_numbers import plain, with_uncertainty
from kinetics_db.engine.tables import Column, Table
from kinetics_db.web.present.charts import Chart, ChartSeries, name_of
from kinetics_db.web.present.units import Units, factor, units_for

DIGITS = 7
MOST_COLUMNS = 40
MOST_CHARTS = 4
MOST_SERIES = 12


@dataclass(frozen=True)
class Heading:
    """A column's name and unit; ``words`` say what its numbers are."""

    name: str
    unit: str
    words: str = ""

    @property
    def text(self) -> str:
        """Name and unit: 'A / mM', 'A / (mol/L)'."""
        unit = f"({self.unit})" if "/" in self.unit else self.unit
        return f"{self.name} / {unit}" if unit else self.name


@dataclass(frozen=True)
class NumbersSheet:
    """Rows of a table as text; ``between`` rows and ``columns_more`` columns are not shown."""

    headings: Sequence[Heading]
    first: Sequence[Sequence[str]]
    last: Sequence[Sequence[str]]
    between: int
    columns_more: int
    rows: int

    @property
    def width(self) -> int:
        """Columns shown."""
        return len(self.headings)


@dataclass(frozen=True)
class Span:
    """From when to when was measured, in words with units."""

    first: str
    last: str


def units_of_table(table: Table, basis: str = "mol/L") -> Units:
    """Units in which one table's numbers are neither tiny nor huge."""
    largest = [
        float(np.nanmax(values))
        for name in table.names("concentration")
        if basis == "mol/L" and np.isfinite(values := table.column(name, "concentration")).any()
    ]
    return units_for(concentrations=largest, durations=[float(table.times[-1])] if table.rows else [])


def with_uncertainties(table: Table) -> tuple[str, ...]:
    """Concentrations of which at least one value has a standard uncertainty."""
    named = table.names("standard uncertainty")
    return tuple(name for name in named if np.isfinite(table.column(name, "standard uncertainty")).any())


def span_of(table: Table) -> Span | None:
    """First and last time in the unit that suits them; None for a table without rows."""
    if not table.rows:
        return None
    unit = units_of_table(table).time
    times = table.times * factor("s", unit)
    return Span(plain(float(times[0]), digits=DIGITS), plain(float(times[-1]), unit, digits=DIGITS))


def signals_sheet(table: Table, *, first: int, last: int = 0) -> NumbersSheet:
    """Time in s and signals in the units of the file, as they are stored."""
    columns = list(enumerate(table.columns))
    shown = columns[:MOST_COLUMNS]

    def row(number: int) -> list[str]:
        return [_text(float(table.values[number, i])) for i, _ in shown]

    headings = [Heading(column.name, column.unit, column.quantity) for _, column in shown]
    return _sheet(table, headings, row, first, last, len(columns) - len(shown))


def concentrations_sheet(
    table: Table, *, units: Units, basis: str, first: int, last: int = 0
) -> NumbersSheet:
    """Time and concentrations with their standard uncertainties, in the page's units."""
    unit, seconds = units.concentration_of(basis), factor("s", units.time)
    known = with_uncertainties(table)
    columns = [column for column in table.columns if column.quantity == "concentration"]
    shown = columns[: MOST_COLUMNS - 1]

    def row(number: int) -> list[str]:
        return [
            _text(float(table.times[number]) * seconds),
            *(_with_u(table, column, number, factor(column.unit or "1", unit), known) for column in shown),
        ]

    headings = [Heading(table.names("time")[0], units.time, "time")]
    for column in shown:
        words = "value(u)" if column.name in known else "value"
        headings.append(Heading(column.name, unit, words))
    return _sheet(table, headings, row, first, last, len(columns) - len(shown))


def signal_charts(table: Table, *, title: str) -> list[Chart]:
    """Charts of the signals, one for each unit, since numbers of different units share no axis."""
    unit_of_time = units_of_table(table).time
    times = table.times * factor("s", unit_of_time)
    by_unit: dict[str, list[tuple[int, Column]]] = {}
    signals = (column for column in table.columns if column.quantity == "signal")
    for position, column in enumerate(signals):
        by_unit.setdefault(column.unit, []).append((position, column))
    charts = []
    for unit, columns in list(by_unit.items())[:MOST_CHARTS]:
        drawn = columns[:MOST_SERIES]
        what = title if len(by_unit) == 1 else f"{title}, {f'in {unit}' if unit else 'without a unit'}"
        if len(columns) > len(drawn):
            what += f" (the first {len(drawn)} of {len(columns)})"
        series = [
            ChartSeries(c.name, position, times, table.column(c.name, "signal")) for position, c in drawn
        ]
        charts.append(Chart("signals", what, name_of(what), unit_of_time, unit, series))
    return charts


def _sheet(
    table: Table,
    headings: Sequence[Heading],
    row: Callable[[int], Sequence[str]],
    first: int,
    last: int,
    more: int,
) -> NumbersSheet:
    beginning = min(first, table.rows)
    end = max(beginning, table.rows - last)
    return NumbersSheet(
        headings=headings,
        first=[row(i) for i in range(beginning)],
        last=[row(i) for i in range(end, table.rows)],
        between=end - beginning,
        columns_more=more,
        rows=table.rows,
    )


def _text(value: float) -> str:
    return plain(value, digits=DIGITS) if np.isfinite(value) else "–"


def _with_u(table: Table, column: Column, row: int, scale: float, known: Iterable[str]) -> str:
    value = float(table.column(column.name, "concentration")[row]) * scale
    if not np.isfinite(value):
        return "–"
    if column.name in known:
        spread = float(table.column(column.name, "standard uncertainty")[row]) * scale
        if np.isfinite(spread) and spread > 0:
            return with_uncertainty(value, spread, "")
    return plain(value, digits=DIGITS)
