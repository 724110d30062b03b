"""The evidence as pages show it: the grid with its legend, and one line for each model version."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import TYPE_CHECKING

from kinetics_db.engine.comparison import Thresholds
from kinetics_db.engine.shown_numbers import difference, percent, plain, probability
from kinetics_db.web.numbers import Shown, shown

if TYPE_CHECKING:
    from kinetics_db.evidence.selectors import Cell, Grid, GridColumn
    from kinetics_db.runs.models import Run

MOST_REASONS = 5
VERDICTS = ("agrees", "consistent", "strained", "disagrees", "not tested")


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

    run: Run
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


@dataclass(frozen=True)
class SummaryLine:
    """One model version in short: its column, and how many runs got which verdict, the best verdict first."""

    column: ColumnSheet
    verdicts: Sequence[tuple[str, str, int]]
    """verdict, its class in the style sheet, number of runs"""


def grid_sheet(
    grid: Grid,
    runs: Sequence[Run],
    temperatures: Mapping[int, Shown | None],
    thresholds: Mapping[str, float],
) -> GridSheet:
    """The grid in words and numbers, a row for each of the runs; temperatures by run id."""
    limits = limits_of(thresholds)
    rows = [
        RowSheet(
            run=run,
            temperature=temperatures.get(run.pk),
            cells=[_cell(run.code, grid.cells.get((run.code, c.fit_id)), limits) for c in grid.columns],
        )
        for run in runs
    ]
    return GridSheet([_column(column) for column in grid.columns], rows, legend(limits))


def summary_lines(
    columns: Sequence[GridColumn], counts: Mapping[int, Mapping[str, int]]
) -> list[SummaryLine]:
    """Columns one below the other, those on the newest dataset first, there the best; counts by fit id."""

    def key(column: GridColumn) -> tuple[int, float]:
        newest = column.origin.dataset_id if column.origin is not None else 0
        return -newest, column.delta_aicc if column.delta_aicc is not None else float("inf")

    return [
        SummaryLine(
            _column(column),
            [
                (verdict, css_of(verdict), n)
                for verdict in VERDICTS
                if (n := counts.get(column.fit_id, {}).get(verdict, 0))
            ],
        )
        for column in sorted(columns, key=key)
    ]


def limits_of(thresholds: Mapping[str, float]) -> Thresholds:
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
