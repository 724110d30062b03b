"""Fits as lists and as a page of their own: how they ended, verdicts, pulls, scatter, minima, correlations."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from django.utils.html import format_html

from kinetics_db.engine.shown_numbers import difference, percent, plain, probability
from kinetics_db.web.names import name_html
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.grid import css_of
from kinetics_db.web.present.models import in_order
from kinetics_db.web.present.runs import anchor_of
from kinetics_db.web.words import place_shown

if TYPE_CHECKING:
    from django.utils.safestring import SafeString

    from kinetics_db.fits.experiments import DataOfFit
    from kinetics_db.fits.models import Fit

OPEN = ("waiting", "running")
WITHOUT_RESULT = ("failed", "crashed")
FAR = 2.0
"""A pull above this, in standard uncertainties, is marked."""
MOST_CORRELATED = 12
MOST_MINIMA = 20
MOST_CONSTANTS_OF_MINIMA = 8
MOST_PULLS = 25
ORDER_OF_VERDICTS = ("agrees", "consistent", "strained", "disagrees", "not tested")


@dataclass(frozen=True)
class FitLine:
    """A fit in a list."""

    fit: Fit
    state: str
    is_open: bool
    progress: float
    seconds: str
    stale: bool
    verdicts: str


def line_sheets(fits: Sequence[Any], verdicts: Mapping[int, Mapping[str, int]]) -> list[FitLine]:
    """Fits of `fits.selectors.fit_lines`; verdict counts by fit id."""
    return [_line(fit, verdicts.get(fit.pk, {})) for fit in fits]


def _line(fit: Any, verdicts: Mapping[str, int]) -> FitLine:
    is_open = fit.job_state in OPEN
    by_job = is_open or fit.result_status is None or fit.job_state in WITHOUT_RESULT
    state = (fit.job_state or "not asked for") if by_job else fit.result_status
    return FitLine(
        fit=fit,
        state=str(state),
        is_open=is_open,
        progress=fit.job_progress or 0.0,
        seconds=plain(fit.result_seconds, "s", digits=3) if fit.result_seconds is not None else "",
        stale=bool(fit.stale),
        verdicts=verdicts_text(verdicts),
    )


def verdicts_text(counts: Mapping[str, int]) -> str:
    """How many runs got each verdict, the best first: 'agrees 12, strained 1'."""
    return ", ".join(f"{verdict} {counts[verdict]}" for verdict in ORDER_OF_VERDICTS if counts.get(verdict))


@dataclass(frozen=True)
class ObservableLine:
    """The tests of one observable in one run."""

    name: str
    verdict: str
    css: str
    points: int
    chi_square: str
    chi_square_p: str
    runs_p: str
    nrmse: str
    largest: str
    note: str


@dataclass(frozen=True)
class RunOfFitSheet:
    """One table of a run under the fit; ``position`` counts the dataset's tables from 1."""

    position: int
    name: str
    run_id: int
    table_id: int
    anchor: str
    verdict: str
    css: str
    words: str
    moved: str
    """what the run rests on and the fit moved beyond the threshold, the farthest first"""
    observables: Sequence[ObservableLine]


def run_sheets_of_fit(data: DataOfFit, evidence: Mapping[str, Any]) -> list[RunOfFitSheet]:
    """The runs in the order of the dataset, judged as the content of the evidence says."""
    by_name = {run["experiment"]: run for run in evidence["runs"]}
    seen: Counter[int] = Counter()
    sheets = []
    for position, (name, item) in enumerate(zip(data.names, data.items, strict=True), start=1):
        run_id = item.run_revision.run_id
        seen[run_id] += 1
        anchor = anchor_of(run_id) + (f"-{seen[run_id]}" if seen[run_id] > 1 else "")
        sheets.append(
            _run_sheet(
                position, name, run_id, item.table_id, anchor, by_name.get(name), evidence["thresholds"]
            )
        )
    return sheets


def _run_sheet(
    position: int,
    name: str,
    run_id: int,
    table_id: int,
    anchor: str,
    run: Mapping[str, Any] | None,
    limits: Mapping[str, float],
) -> RunOfFitSheet:
    verdict = run["verdict"] if run else "not tested"
    return RunOfFitSheet(
        position=position,
        name=name,
        run_id=run_id,
        table_id=table_id,
        anchor=anchor,
        verdict=verdict,
        css=css_of(verdict),
        words=_words(run, limits) if run else "nothing of this run was judged",
        moved=_moved(run, limits) if run else "",
        observables=[_observable(one) for one in run["observables"]] if run else [],
    )


def _words(run: Mapping[str, Any], limits: Mapping[str, float]) -> str:
    """The observable that decided, in words; where the tests pass in spite of a strain, the one nearest to failing."""
    worst = next((o for o in run["observables"] if o["observable"] == run["worst_observable"]), None)
    if worst is None:
        return "no observable could be tested"
    tests = (("chi-square p", "chi_square_p"), ("runs test p", "runs_p"))
    known = [(what, p, limits[key]) for what, key in tests if (p := worst[f"{key}_adjusted"]) is not None]
    parts = [f"{what} {probability(p)}" for what, p, _ in known]
    parts.append(f"root mean square error {percent(worst['nrmse'])} of the measured span")
    passed = all(p >= limit for _, p, limit in known)
    start = "the tests pass, the least" if run["verdict"] == "strained" and passed else "decided by"
    return f"{start} {worst['observable']}: {', '.join(parts)}"


def _moved(run: Mapping[str, Any], limits: Mapping[str, float]) -> str:
    far = sorted(
        (pull for pull in run["pulls"] if abs(pull["pull"]) > limits["pull"]), key=lambda p: -abs(p["pull"])
    )
    own = f"run {run['experiment']}: "
    return _several([f"{pull['name'].removeprefix(own)} by {_signed(pull['pull'])} u" for pull in far])


def _signed(pull: float) -> str:
    return ("+" if pull > 0 else "") + plain(pull, digits=2)


def _observable(one: Mapping[str, Any]) -> ObservableLine:
    chi_square = plain(one["chi_square"], digits=3)
    if one["degrees_of_freedom"] is not None:
        chi_square += f" on {plain(one['degrees_of_freedom'], digits=3)}"
    return ObservableLine(
        name=one["observable"],
        verdict=one["verdict"],
        css=css_of(one["verdict"]),
        points=one["n"],
        chi_square=chi_square,
        chi_square_p=probability(one["chi_square_p_adjusted"]),
        runs_p=probability(one["runs_p_adjusted"]),
        nrmse=percent(one["nrmse"]),
        largest=plain(one["largest_standardised"], digits=2),
        note=one["note"],
    )


@dataclass(frozen=True)
class PullLine:
    """How far the fit moved one cause of error."""

    name: str
    owner: str
    factor: Shown
    pull: str
    far: bool
    runs: str


def pull_lines(content: Mapping[str, Any]) -> list[PullLine]:
    """Pulls of a result, the farthest first."""
    pulls = sorted(content.get("pulls", ()), key=lambda pull: -abs(pull["pull"]))
    return [
        PullLine(
            name=pull["name"],
            owner=pull["owner"],
            factor=shown(pull["value"], digits=5),
            pull=_signed(pull["pull"]),
            far=abs(pull["pull"]) > FAR,
            runs=_several(pull["experiments"]),
        )
        for pull in pulls
    ]


def _several(names: Sequence[str], most: int = 4) -> str:
    more = f" and {len(names) - most} more" if len(names) > most else ""
    return ", ".join(names[:most]) + more


@dataclass(frozen=True)
class SigmaLine:
    """A standard uncertainty of the points that the fit found."""

    observable: str
    value: Shown
    points: int
    freedom: str


def sigma_lines(content: Mapping[str, Any], unit: str) -> list[SigmaLine]:
    """Fitted scatter of the points; empty where it was tabulated."""
    return [
        SigmaLine(
            observable=sigma["observable"] or "all points",
            value=shown(sigma["value"], unit=unit, digits=3),
            points=sigma["n_points"],
            freedom=plain(sigma["degrees_of_freedom"], digits=3),
        )
        for sigma in content.get("sigmas", ())
    ]


@dataclass(frozen=True)
class Minima:
    """Distinct end points of several starts: above the lowest, how often found, constants there."""

    constants: Sequence[SafeString]
    rows: Sequence[tuple[str, int, Sequence[Shown]]]
    further: int


def minima_sheet(content: Mapping[str, Any]) -> Minima | None:
    """The table of minima; None where only one start was made."""
    minima = content.get("minima", ())
    if not minima:
        return None
    chosen = [i for i, p in enumerate(content["parameters"]) if p["kind"] != "nuisance"]
    chosen = chosen[:MOST_CONSTANTS_OF_MINIMA]
    lowest = minima[0]["cost"]
    rows = [
        (
            difference(found["cost"] - lowest),
            found["found"],
            [shown(found["values"][i], digits=4) for i in chosen],
        )
        for found in minima[:MOST_MINIMA]
    ]
    names = [_name_with_place(content["parameters"][i]) for i in chosen]
    return Minima(names, rows, max(0, len(minima) - MOST_MINIMA))


@dataclass(frozen=True)
class Correlations:
    """Correlations of the constants on the fitted scale; ``None`` above the diagonal."""

    names: Sequence[SafeString]
    rows: Sequence[tuple[SafeString, Sequence[str]]]
    further: int


def correlation_sheet(content: Mapping[str, Any]) -> Correlations | None:
    """Lower triangle of the correlation matrix of the determined constants; None when there are fewer than two."""
    parameters = content.get("parameters", ())
    covariance = np.array(content.get("covariance", ()), dtype=float)
    if covariance.ndim != 2 or covariance.shape[0] != len(parameters):
        return None
    place = {p["name"]: i for i, p in enumerate(parameters)}
    fitted = [p for p in parameters if p["kind"] != "nuisance" and p["determined"]]
    chosen = [place[p["name"]] for p in in_order(fitted)]
    chosen = [i for i in chosen if math.isfinite(covariance[i, i]) and covariance[i, i] > 0.0]
    if len(chosen) < 2:
        return None
    shown_here = chosen[:MOST_CORRELATED]
    names = [_name_with_place(parameters[i]) for i in shown_here]
    rows = [
        (names[row], [_correlation(covariance, i, j) for j in shown_here[: row + 1]])
        for row, i in enumerate(shown_here)
    ]
    return Correlations(names, rows, len(chosen) - len(shown_here))


def _correlation(covariance: np.ndarray, i: int, j: int) -> str:
    if i == j:
        return "1"
    value = covariance[i, j] / math.sqrt(covariance[i, i] * covariance[j, j])
    return plain(round(value, 3), digits=3) if math.isfinite(value) else plain(None)


def _name_with_place(parameter: Mapping[str, Any]) -> SafeString:
    name = name_html(parameter["base"])
    place = place_shown(parameter["place"]).text if parameter["place"] else ""
    return format_html("{}, {}", name, place) if place else name


@dataclass(frozen=True)
class Criteria:
    """Numbers by which the fit is compared with others to the same points."""

    aicc: Shown
    bic: Shown
    counted: str
    why_no_aicc: str


def criteria_of(model: Mapping[str, Any]) -> Criteria:
    """AICc and BIC of the evidence, and how many parameters the data were asked for."""
    return Criteria(
        aicc=Shown(difference(model["aicc"]), repr(model["aicc"]), repr(model["aicc"])),
        bic=Shown(difference(model["bic"]), repr(model["bic"]), repr(model["bic"])),
        counted=plain(model["k"], digits=3),
        why_no_aicc=model["why_no_aicc"],
    )
