"""Constants and evidence of a project as plain text for a terminal of 100 columns."""

from __future__ import annotations

import math
import string
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from kinetics_db.engine.shown_numbers import TERMINAL, difference, interval, plain, with_uncertainty
from kinetics_db.evidence.selectors import Grid, GridColumn, grid_of
from kinetics_db.fits.selectors import fit_by_id, fits_in, result_of
from kinetics_db.jobs.selectors import jobs_for

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.fits.models import Fit, FitResult
    from kinetics_db.projects.models import Project

WIDTH = 100
LONGEST_CODE = 24
VERDICT_WIDTH = len("not tested") + 2
WORDS = (
    ("agrees", "every test of every observable is passed, with uncertainties known beforehand"),
    ("consistent", "the tests are passed, but the uncertainties were estimated by the fit itself"),
    ("strained", "a test fails while the error stays small, or an error of the run is pulled far"),
    ("disagrees", "a test fails and the error is not small"),
    ("not tested", "the run was neither fitted nor predicted, or alone determines its constants"),
)


def report_of(*, user: User, project: Project) -> str:
    """Constants with intervals of each newest fit, then the grid of verdicts."""
    grid = grid_of(user=user, project_id=project.pk)
    parts = [_heading(project)]
    for column in grid.columns:
        fit = fit_by_id(user=user, fit_id=column.fit_id)
        result = result_of(fit)
        if result is not None:
            parts.append(constants_text(fit, result))
    parts += _without_result(user, project, {column.fit_id for column in grid.columns})
    parts.append(grid_text(grid))
    return "\n\n".join(parts) + "\n"


def _heading(project: Project) -> str:
    lines = [clipped(project.name, WIDTH), "=" * min(len(project.name), WIDTH)]
    if project.invented:
        lines.append("The data of this project are INVENTED, for demonstration; nothing here was measured.")
    return "\n".join(lines)


def constants_text(fit: Fit, result: FitResult) -> str:
    """One line for each constant and place: value(standard uncertainty), unit, interval."""
    content = result.content
    title = f"{fit.mechanism_version} on {fit.dataset}: {result.status} in {result.seconds:.1f} s, "
    title += f"{content['points']} values"
    shown = [p for p in content["parameters"] if p["kind"] != "nuisance"]
    order = list(dict.fromkeys(p["base"] for p in shown))
    shown.sort(key=lambda p: (order.index(p["base"]), place_key(p["place"] or "")))
    rows = [("constant", "where", "value", "unit", f"{100 * content['confidence']:g} % interval")]
    rows += [_constant_row(p) for p in shown]
    return "\n".join([title, *columns_of(rows, right=(2,))])


def _constant_row(p: Mapping[str, Any]) -> tuple[str, str, str, str, str]:
    name, where, unit = p["base"], p["place"] or "all runs", p["unit"]
    if not p["determined"]:
        value = plain(p["value"], digits=3, style=TERMINAL)
        return name, where, value, unit, f"not determined: {p['why_not']}"
    value = with_uncertainty(p["value"], p["standard_error"], style=TERMINAL)
    between = interval(p["lower"], p["upper"], style=TERMINAL)
    if p["set_by_prior"]:
        between += "  (set by its prior)"
    return name, where, value, unit, between


def _without_result(user: User, project: Project, shown: set[int]) -> list[str]:
    """What became of fits that have no evidence, so that none is passed over in silence."""
    others = [fit for fit in fits_in(user=user, project_id=project.pk) if fit.pk not in shown]
    jobs = jobs_for(kind="fit", subject_ids=[fit.pk for fit in others])
    lines = []
    for fit in reversed(others):
        job = jobs.get(fit.pk)
        if job is not None and job.state != "done":
            lines.append(
                clipped(f"{fit.mechanism_version} on {fit.dataset}: {job.state}  {job.message}", WIDTH)
            )
    return ["\n".join(lines)] if lines else []


def grid_text(grid: Grid) -> str:
    """Runs down, model versions across, a verdict in every cell; AICc differences below."""
    if not grid.columns:
        return "No fit has a result yet."
    code_width = min(max([len("AICc above the lowest"), *map(len, grid.runs)]), LONGEST_CODE)
    in_a_block = max(1, (WIDTH - code_width) // VERDICT_WIDTH)
    lines = ["Which version explains which run", *_legend_of_columns(grid.columns)]
    for begin in range(0, len(grid.columns), in_a_block):
        lines += ["", *_block(grid, begin, grid.columns[begin : begin + in_a_block], code_width)]
    used = {cell.verdict for cell in grid.cells.values()}
    lines += ["", *(f"{word:<{VERDICT_WIDTH}}{meaning}" for word, meaning in WORDS if word in used)]
    lines.append(
        "AICc compares fits of the same values; more than 10 above the lowest has little support left."
    )
    lines.append("The simplest version that explains the data is no proof of the path.")
    return "\n".join(lines)


def _legend_of_columns(columns: Sequence[GridColumn]) -> Iterable[str]:
    for i, column in enumerate(columns):
        status = "" if column.status == "converged" else f"({column.status}) "
        yield clipped(f"  {label(i)}  {status}{column.mechanism} on {column.dataset}", WIDTH)
        for reason in column.stale.reasons[:3]:
            yield clipped(f"     stale: {reason}", WIDTH)


def _block(grid: Grid, begin: int, columns: Sequence[GridColumn], code_width: int) -> Iterable[str]:
    def row(head: str, cells: Iterable[str]) -> str:
        return (
            f"{clipped(head, code_width):<{code_width}}" + "".join(f"{c:>{VERDICT_WIDTH}}" for c in cells)
        ).rstrip()

    yield row("run", (label(begin + i) for i in range(len(columns))))
    for code in grid.runs:
        cells = [grid.cells.get((code, column.fit_id)) for column in columns]
        yield row(code, (cell.verdict if cell is not None else "." for cell in cells))
    yield row("AICc above the lowest", (difference(column.delta_aicc, style=TERMINAL) for column in columns))


def label(index: int) -> str:
    """A, B, ..., Z, AA, AB, ..."""
    letters = ""
    index += 1
    while index:
        index, rest = divmod(index - 1, 26)
        letters = string.ascii_uppercase[rest] + letters
    return letters


def place_key(place: str) -> tuple[float, str]:
    """Sorts '288.15 K' by its number, and names by themselves."""
    try:
        return float(place.split()[0]), place
    except (ValueError, IndexError):
        return math.inf, place


def columns_of(rows: Sequence[Sequence[str]], *, right: Sequence[int] = ()) -> list[str]:
    """Rows aligned in columns two blanks apart, none wider than a line; the ``right`` ones to their right."""
    widths = [min(max(len(row[i]) for row in rows), 30) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [
            clipped(cell, widths[i]).rjust(widths[i])
            if i in right
            else clipped(cell, widths[i]).ljust(widths[i])
            for i, cell in enumerate(row[:-1])
        ]
        lines.append(clipped("  " + "  ".join([*cells, row[-1]]), WIDTH).rstrip())
    return lines


def clipped(text: str, width: int) -> str:
    """The text, with '...' for what does not fit."""
    text = " ".join(text.split("\n"))
    return text if len(text) <= width else text[: width - 3] + "..."
