"""Constants and evidence of a project as plain text for a terminal of 100 columns."""

from __future__ import annotations

import math
import string
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from kinetics_db.engine.comparison import Thresholds
from kinetics_db.engine.shown_numbers import (
    TERMINAL,
    difference,
    interval,
    percent,
    plain,
    probability,
    with_uncertainty,
)
from kinetics_db.evidence.selectors import Cell, Grid, GridColumn, grid_of
from kinetics_db.evidence.services import thresholds_of
from kinetics_db.fits.selectors import fit_by_id, fits_in, result_of
from kinetics_db.jobs.selectors import jobs_for

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.fits.models import Fit, FitResult
    from kinetics_db.projects.models import Project

WIDTH = 100
LONGEST_CODE = 24
VERDICT_WIDTH = len("not tested") + 2
AGAINST = ("strained", "disagrees")
WORDS = (
    ("agrees", "every test of every observable is passed, with uncertainties known beforehand"),
    ("consistent", "the tests are passed, but the uncertainties were estimated by the fit itself"),
    ("strained", "a test fails while the error stays small, or something the run rests on is pulled far"),
    ("disagrees", "a test fails and the error is not small"),
    ("not tested", "the run was neither fitted nor predicted, or alone determines its constants"),
)


def report_of(*, user: User, project: Project) -> str:
    """Constants with intervals of each newest fit, then the grid of verdicts."""
    grid = grid_of(user=user, project_id=project.pk)
    parts = [_heading(project)]
    titles, limits = {}, Thresholds()
    for column in grid.columns:
        fit = fit_by_id(user=user, fit_id=column.fit_id)
        titles[fit.pk], limits = title_of(fit), thresholds_of(fit)
        result = result_of(fit)
        if result is not None:
            parts.append(constants_text(fit, result))
    parts += _without_result(user, project, {column.fit_id for column in grid.columns})
    parts.append(grid_text(grid, titles, limits))
    return "\n\n".join(parts) + "\n"


def _heading(project: Project) -> str:
    lines = [clipped(project.name, WIDTH), "=" * min(len(project.name), WIDTH)]
    if project.invented:
        lines.append("The data of this project are INVENTED, for demonstration; nothing here was measured.")
    return "\n".join(lines)


def title_of(fit: Fit) -> str:
    """What was fitted to what, the dataset's name in quotes so that it reads apart."""
    return f"{fit.mechanism_version} on the dataset '{fit.dataset.name}', version {fit.dataset.number}"


def constants_text(fit: Fit, result: FitResult) -> str:
    """One line for each constant and place: value(standard uncertainty), unit, interval."""
    content = result.content
    title = f"{title_of(fit)}: {result.status} in {result.seconds:.1f} s, {content['points']} values"
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
            lines.append(clipped(f"{title_of(fit)}: {job.state}  {job.message}", WIDTH))
    return ["\n".join(lines)] if lines else []


def grid_text(grid: Grid, titles: Mapping[int, str], limits: Thresholds) -> str:
    """Runs down, model versions across, a verdict in every cell; AICc differences and reasons below.

    ``titles`` is by fit id; ``limits`` are the project's.
    """
    if not grid.columns:
        return "No fit has a result yet."
    code_width = min(max([len("AICc above the lowest"), *map(len, grid.runs)]), LONGEST_CODE)
    in_a_block = max(1, (WIDTH - code_width) // VERDICT_WIDTH)
    lines = ["Which version explains which run", *_legend_of_columns(grid.columns, titles)]
    for begin in range(0, len(grid.columns), in_a_block):
        lines += ["", *_block(grid, begin, grid.columns[begin : begin + in_a_block], code_width)]
    lines += _reasons(grid, limits)
    used = {cell.verdict for cell in grid.cells.values()}
    lines += ["", *(f"{word:<{VERDICT_WIDTH}}{meaning}" for word, meaning in WORDS if word in used)]
    lines.append(
        "AICc compares fits of the same values; more than 10 above the lowest has little support left."
    )
    lines.append("The simplest version that explains the data is no proof of the path.")
    return "\n".join(lines)


def _legend_of_columns(columns: Sequence[GridColumn], titles: Mapping[int, str]) -> Iterable[str]:
    for i, column in enumerate(columns):
        status = "" if column.status == "converged" else f"({column.status}) "
        yield clipped(f"  {label(i)}  {status}{titles[column.fit_id]}", WIDTH)
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


def _reasons(grid: Grid, limits: Thresholds) -> list[str]:
    """What decided each verdict that is no agreement, run by run, a paragraph for each column and verdict."""
    lines = []
    for i, column in enumerate(grid.columns):
        for verdict in AGAINST:
            found: dict[str, list[str]] = {}
            for code in grid.runs:
                cell = grid.cells.get((code, column.fit_id))
                if cell is not None and cell.verdict == verdict:
                    found.setdefault(reason_of(code, cell, limits), []).append(clipped(code, LONGEST_CODE))
            if found:
                lines += [f"  {label(i)} {verdict}", *_by_reason(found)]
    if not lines:
        return []
    meaning = (
        "NRMSE: root mean square error as a share of the span; u: a standard uncertainty of what is pulled"
    )
    return ["", "What decided", *lines, meaning]


def _by_reason(found: Mapping[str, Sequence[str]]) -> list[str]:
    """A cause that several runs share once, with them all; what is a run's own beside its code."""
    lines = []
    for reason, codes in found.items():
        if len(codes) > 1:
            text = f"{reason}: {', '.join(codes)}"
            lines += textwrap.wrap(text, WIDTH, initial_indent=" " * 5, subsequent_indent=" " * 7)
    alone = [f"{codes[0]} {reason}" for reason, codes in found.items() if len(codes) == 1]
    return lines + side_by_side(alone, indent=5)


def reason_of(code: str, cell: Cell, limits: Thresholds) -> str:
    """'charge 5 pulled +10.1 u' where a pull decided, else 'ester: p 0.0021, NRMSE 1.4 %'."""
    if cell.pull is not None and cell.verdict == "strained" and abs(cell.pull) > limits.pull:
        sign = "+" if cell.pull > 0 else ""
        what = cell.pull_name.removeprefix(f"run {code}: ")
        return f"{what} pulled {sign}{plain(cell.pull, digits=3, style=TERMINAL)} u"
    p, error = probability(cell.p_value, style=TERMINAL), percent(cell.nrmse, style=TERMINAL)
    return f"{cell.observable}: p {p}, NRMSE {error}"


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


def side_by_side(texts: Sequence[str], *, indent: int) -> list[str]:
    """Short texts in as many equal columns as a line has room for, read along the lines."""
    room = WIDTH - indent
    texts = [clipped(text, room) for text in texts]
    width = max(map(len, texts), default=0)
    across = (room + 3) // (width + 3)
    lines = [texts[begin : begin + across] for begin in range(0, len(texts), across)]
    return [" " * indent + "   ".join(f"{text:<{width}}" for text in line).rstrip() for line in lines]


def clipped(text: str, width: int) -> str:
    """The text, with '...' for what does not fit."""
    text = " ".join(text.split("\n"))
    return text if len(text) <= width else text[: width - 3] + "..."
