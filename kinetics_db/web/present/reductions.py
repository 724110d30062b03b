"""A reduction's outcome as a page shows it, stored or only tried: notes, common errors, numbers, a chart."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from kinetics_db.engine.calibration import ConcentrationTableResult
from kinetics_db.engine.shown_numbers import plain
from kinetics_db.engine.tables import Table
from kinetics_db.web.forms import problem_words
from kinetics_db.web.present.charts import Chart, concentrations, positions_of
from kinetics_db.web.present.tables import (
    NumbersSheet,
    Span,
    concentrations_sheet,
    span_of,
    units_of_table,
    with_uncertainties,
)


@dataclass(frozen=True)
class ReducedSheet:
    """Concentrations with what is known about their errors."""

    notes: Sequence[str]
    warnings: Sequence[str]
    scale_errors: Sequence[str]
    without_uncertainty: Sequence[str]
    numbers: NumbersSheet
    chart: Chart
    span: Span | None
    rows: int


def reduced_sheet(
    table: Table,
    *,
    basis: str,
    notes: Sequence[str],
    scale_errors: Sequence[Mapping[str, Any]],
    title: str,
    warnings: Sequence[str] = (),
    first: int,
    last: int = 0,
) -> ReducedSheet:
    """The sheet of a table."""
    units, positions = units_of_table(table, basis), positions_of(table.names("concentration"))
    known = with_uncertainties(table)
    return ReducedSheet(
        notes=notes,
        warnings=warnings,
        scale_errors=[scale_error_words(error) for error in scale_errors],
        without_uncertainty=[name for name in table.names("concentration") if name not in known],
        numbers=concentrations_sheet(table, units=units, basis=basis, first=first, last=last),
        chart=concentrations(table, basis=basis, title=title, name=title, units=units, positions=positions),
        span=span_of(table),
        rows=table.rows,
    )


def tried_sheet(result: ConcentrationTableResult) -> ReducedSheet:
    """The sheet of a reduction that is not stored."""
    errors = [
        {"owner": e.owner, "relative_u": e.relative_u, "columns": list(e.columns)}
        for e in result.scale_errors
    ]
    return reduced_sheet(
        result.table,
        basis=result.basis,
        notes=result.notes,
        scale_errors=errors,
        title="Concentrations by this recipe",
        warnings=[problem_words(problem) for problem in result.warnings],
        first=5,
        last=3,
    )


def scale_error_words(error: Mapping[str, Any]) -> str:
    """'stock 3: 1 % on A and B together'."""
    columns = list(error["columns"])
    of = columns[0] if len(columns) == 1 else f"{', '.join(columns[:-1])} and {columns[-1]} together"
    return f"{error['owner']}: {plain(100 * error['relative_u'], digits=3)} % on all values of {of}"
