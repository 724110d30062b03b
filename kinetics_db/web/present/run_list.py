"""Runs as lines of a list: a small curve, the temperature, a column for each compound that many of them hold."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from django.utils.safestring import SafeString

from kinetics_db.engine.shown_numbers import with_uncertainty
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.charts import positions_of
from kinetics_db.web.present.units import PERCENT, ZERO_CELSIUS, Units, units_for
from kinetics_db.web.present.units import factor as units_factor
from kinetics_db.web.thumbnails import thumbnail

if TYPE_CHECKING:
    from kinetics_db.engine.tables import Table
    from kinetics_db.measurements.rows import RunRow
    from kinetics_db.runs.models import Run
    from kinetics_db.runs.selectors import StartConcentration

MOST_COLUMNS = 6
"""More compounds than this would not fit across a page; the rest stand in words."""


@dataclass(frozen=True)
class RunLine:
    """One run; ``cells`` are its start concentrations by the list's columns, ``others`` those without a column."""

    run: Run
    curve: SafeString | None
    temperature: Shown | None
    cells: Sequence[Shown | None]
    others: Sequence[tuple[str, Shown]]
    tables: int
    waits: str
    """what it waits for, in words; empty when it has a table"""


@dataclass(frozen=True)
class RunList:
    """Lines with their columns: compounds, and the unit that their concentrations are in."""

    compounds: Sequence[str]
    unit: str
    lines: Sequence[RunLine]
    has_others: bool


def run_list(rows: Sequence[RunRow]) -> RunList:
    """The lines of a page; units and columns are chosen for the page as a whole."""
    counted = Counter(part.compound for row in rows for part in row.starts)
    compounds = [name for name, _ in counted.most_common(MOST_COLUMNS)]
    units = units_for(
        concentrations=(part.value for row in rows if row.basis == "mol/L" for part in row.starts),
        durations=(row.table.last_time for row in rows if row.table is not None and row.table.last_time),
    )
    tables = {row.run.pk: row.table.table for row in rows if row.table is not None}
    columns = (name for table in tables.values() for name in table.names("concentration"))
    positions = positions_of(columns)
    lines = [_line(row, compounds, units, tables.get(row.run.pk), positions) for row in rows]
    return RunList(compounds, units.concentration, lines, any(line.others for line in lines))


def _line(
    row: RunRow, compounds: Sequence[str], units: Units, table: Table | None, positions: Mapping[str, int]
) -> RunLine:
    starts = {part.compound: _concentration(part, row.basis, units) for part in row.starts}
    return RunLine(
        run=row.run,
        curve=None if table is None else _curve(row.run.code, table, positions),
        temperature=_temperature(row),
        cells=[starts.get(name) for name in compounds],
        others=[(name, value) for name, value in starts.items() if name not in compounds],
        tables=row.tables,
        waits="" if not row.waits else "waits for its reduction" if row.files else "waits for its file",
    )


def _temperature(row: RunRow) -> Shown | None:
    if row.temperature is None:
        return None
    text = with_uncertainty(round(row.temperature - ZERO_CELSIUS, 6), row.temperature_u)
    return Shown(text, f"{row.temperature!r} K", repr(row.temperature))


def _concentration(part: StartConcentration, basis: str, units: Units) -> Shown:
    """In the column's unit, which the heading says; percent say so themselves."""
    unit = units.concentration_of(basis)
    scale = 1.0 if unit == PERCENT else units_factor("mol/L", unit)
    value, spread = part.value * scale, part.standard_uncertainty * scale
    whole = shown(value, spread, unit)
    return whole if unit == PERCENT else Shown(with_uncertainty(value, spread), whole.exact, whole.value)


def _curve(code: str, table: Table, positions: Mapping[str, int]) -> SafeString:
    names = table.names("concentration")
    title = f"Run {code}: {', '.join(names)} over time"
    return thumbnail(
        title, [(positions[name], table.times, table.column(name, "concentration")) for name in names]
    )
