"""The evidence grid as the project page shows it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import TYPE_CHECKING

from kinetics_db.engine.comparison import Thresholds
from kinetics_db.engine.shown_numbers import difference, percent, plain, probability
from kinetics_db.web.numbers import Shown, shown

if TYPE_CHECKING:
    from kinetics_db.evidence.selectors import Cell, Grid, GridColumn
    from kinetics_db.web.present.runs import RunSheet

MOST_REASONS = 5


@dataclass(frozen=True)
class CellSheet:
    """One verdict; no verdict is a run that was never tried with this model."""

    fit_id: int
    verdict: str
    css: str
    reasons: Sequence[str]
    table: str


@dataclass(frozen=True)
class RowSheet:
    """A run's verdicts, in the order of the columns."""

    code: str
    anchor: str
    temperature: Shown | None
    cells: Sequence[CellSheet | None]


@dataclass(frozen=True)
class ColumnSheet:
    """A mechanism version as fitted, its criteria written out."""

    column: GridColumn
    aicc: Shown
    delta: str
    bic: Shown
    reasons: Sequence[str]
    further_reasons: int


@dataclass(frozen=True)
class GridSheet:
    """Runs down, model versions across."""

    columns: Sequence[ColumnSheet]
    rows: Sequence[RowSheet]
    legend: Sequence[tuple[str, str, str]]
    """verdict, its class in the style sheet, what it means"""


def grid_sheet(grid: Grid, runs: Sequence[RunSheet], thresholds: Mapping[str, float]) -> GridSheet:
    """The grid in words and numbers; runs that no fit has used are left out."""
    by_code = {run.code: run for run in runs}
    limits = _limits(thresholds)
    tried = {code for code, _ in grid.cells}
    rows = [
        RowSheet(
            code=code,
            anchor=by_code[code].anchor if code in by_code else "",
            temperature=by_code[code].temperature if code in by_code else None,
            cells=[_cell(code, grid.cells.get((code, column.fit_id)), limits) for column in grid.columns],
        )
        for code in grid.runs
        if code in tried
    ]
    return GridSheet([_column(column) for column in grid.columns], rows, legend(limits))


def _limits(thresholds: Mapping[str, float]) -> Thresholds:
    """The defaults and what the project sets differently; a page that is only read passes over wrong names."""
    known = {f.name for f in fields(Thresholds)}
    return replace(Thresholds(), **{name: value for name, value in thresholds.items() if name in known})  # type: ignore[arg-type]


def legend(limits: Thresholds) -> list[tuple[str, str, str]]:
    """What each verdict means under a project's thresholds."""
    error = percent(limits.nrmse)
    meanings = {
        "agrees": f"every observable passes both tests: chi-square (p at least {limits.chi_square_p:g}) and runs "
        f"of residuals on one side (p at least {limits.runs_p:g})",
        "consistent": "the same, but the size of the errors was found by the fit itself, so chi-square cannot test it",
        "strained": f"a test fails while the error stays within {error} of the measured span, or the fit had to "
        f"move something that the run rests on by more than {limits.pull:g} of its standard uncertainties",
        "disagrees": f"a test fails and the error is above {error} of the span: this model does not explain the run",
        "not tested": "nothing of the run could be judged, or its points are used up by parameters that only it has",
    }
    return [(verdict, css_of(verdict), meaning) for verdict, meaning in meanings.items()]


def css_of(verdict: str) -> str:
    """The verdict as a class in the style sheet."""
    return "v-" + verdict.replace(" ", "-")


def _cell(code: str, cell: Cell | None, limits: Thresholds) -> CellSheet | None:
    if cell is None:
        return None
    reasons = []
    if cell.pull is not None and cell.verdict == "strained" and abs(cell.pull) > limits.pull:
        what = cell.pull_name.removeprefix(f"run {code}: ")
        sign = "+" if cell.pull > 0 else ""
        reasons.append(f"{what} {_unbroken(f'pulled {sign}{plain(cell.pull, digits=3)} u')}")
    if cell.observable:
        p, error = f"p {probability(cell.p_value)},", f"NRMSE {percent(cell.nrmse)}"
        reasons.append(f"{cell.observable}: {_unbroken(p)} {_unbroken(error)}")
    return CellSheet(cell.fit_id, cell.verdict, css_of(cell.verdict), reasons, cell.table)


def _unbroken(text: str) -> str:
    return text.replace(" ", "\N{NO-BREAK SPACE}")


def _column(column: GridColumn) -> ColumnSheet:
    reasons = column.stale.reasons
    return ColumnSheet(
        column=column,
        aicc=_criterion(column.aicc),
        delta=difference(column.delta_aicc),
        bic=_criterion(column.bic),
        reasons=reasons[:MOST_REASONS],
        further_reasons=max(0, len(reasons) - MOST_REASONS),
    )


def _criterion(value: float | None) -> Shown:
    return Shown(difference(value), shown(value).exact, shown(value).value)
