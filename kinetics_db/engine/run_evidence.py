"""How well one fitted model explains each run: tests, their verdict, and the thresholds stored with it.

All numbers come from a `FitOutcome`; nothing is integrated again.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from kinetics_db.engine.fitting.outcome import ExperimentFit, FitOutcome, NuisancePull
from kinetics_db.engine.fitting.uncertainty import curvature
from kinetics_db.engine.residual_tests import durbin_watson, holm, runs_test
from kinetics_db.errors import InvalidInput

Floats = NDArray[np.float64]
Verdict = Literal["agrees", "consistent", "strained", "disagrees", "not tested"]
FROM_BEST_TO_WORST: tuple[Verdict, ...] = ("not tested", "agrees", "consistent", "strained", "disagrees")
TOO_LARGE = "uncertainties too large to test"
SMALLEST_FREEDOM = 0.5  # degrees of freedom below which a run is used up by its own parameters


@dataclass(frozen=True)
class Thresholds:
    """Where the verdicts change.

    Attributes
    ----------
    chi_square_p, runs_p : smallest Holm-adjusted p that still counts as agreement
    nrmse : largest normalised root mean square error that makes a failed test 'strained' only
    pull : largest nuisance pull, in standard deviations of its prior
    too_good_p : chi-square p above which the uncertainties are too large to test anything
    fewest_points_for_runs : fewest points for a runs test
    """

    chi_square_p: float = 0.01
    runs_p: float = 0.01
    nrmse: float = 0.05
    pull: float = 3.0
    too_good_p: float = 0.999
    fewest_points_for_runs: int = 10


@dataclass(frozen=True)
class ObservableEvidence:
    """One observable of one run.

    Attributes
    ----------
    n : points fitted
    chi_square, degrees_of_freedom : sum of squared standardised residuals, and n less the trace of
        the hat block
    chi_square_p, chi_square_p_adjusted : upper tail, as it is and Holm-adjusted over the runs of the fit
    nrmse : root mean square residual / max(span of the observed values, 5 sigma)
    runs_p, runs_p_adjusted : exact one-sided runs test; None below the fewest points
    durbin_watson, largest_standardised : None without points
    verdict, note
    """

    experiment: str
    observable: str
    n: int
    chi_square: float | None
    degrees_of_freedom: float | None
    chi_square_p: float | None
    chi_square_p_adjusted: float | None
    nrmse: float | None
    runs_p: float | None
    runs_p_adjusted: float | None
    durbin_watson: float | None
    largest_standardised: float | None
    verdict: Verdict
    note: str = ""


@dataclass(frozen=True)
class RunEvidence:
    """One run: its observables, the nuisance pulls that are its own, and the worst verdict."""

    experiment: str
    verdict: Verdict
    worst_observable: str | None
    observables: tuple[ObservableEvidence, ...]
    pulls: tuple[NuisancePull, ...]
    thresholds: Thresholds
    note: str = ""


@dataclass(frozen=True)
class _Raw:
    """Numbers of one observable before the tests are adjusted for one another."""

    experiment: str
    observable: str
    n: int
    chi_square: float | None = None
    freedom: float | None = None
    chi_square_p: float | None = None
    nrmse: float | None = None
    runs_p: float | None = None
    durbin_watson: float | None = None
    largest: float | None = None


def evidence_of_runs(fit: FitOutcome, thresholds: Thresholds | None = None) -> tuple[RunEvidence, ...]:
    """Verdict on every run of a fit, in its order.

    An observable *agrees* when the chi-square and the runs test both have p >= 0.01, *strained* when one
    fails but the error stays within 5 % of the span or when a nuisance pull of the run exceeds 3, and
    *disagrees* otherwise. Chi-square counts only where sigma was known beforehand; with a fitted sigma the
    strongest word is *consistent*. p-values are Holm-adjusted, each test and observable over the runs.

    Raises
    ------
    InvalidInput
        When the fit has no point to judge.
    """
    limits = thresholds or Thresholds()
    if not fit.experiments:
        raise InvalidInput(f"the fit has no result to judge: {fit.message}")
    leverage = _leverage_by_experiment(fit)
    raw = [
        _raw(e, column, h, limits)
        for e, h in zip(fit.experiments, leverage, strict=True)
        for column in range(len(e.observed_names))
    ]
    chi = _adjusted_over_runs(raw, [r.chi_square_p for r in raw])
    runs = _adjusted_over_runs(raw, [r.runs_p for r in raw])
    known_sigma = fit.n_estimated_sigmas == 0
    found: list[RunEvidence] = []
    for e in fit.experiments:
        pulls = tuple(p for p in fit.pulls if p.owner == e.owner or p.experiments == (e.name,))
        pulled = any(abs(p.pull) > limits.pull for p in pulls)
        observables = tuple(
            _judged(r, c, s, known_sigma=known_sigma, pulled=pulled, limits=limits)
            for r, c, s in zip(raw, chi, runs, strict=True)
            if r.experiment == e.name
        )
        found.append(_run(e.name, observables, pulls, limits))
    return tuple(found)


def _run(
    name: str, observables: Sequence[ObservableEvidence], pulls: tuple[NuisancePull, ...], limits: Thresholds
) -> RunEvidence:
    if not observables:
        return RunEvidence(name, "not tested", None, (), pulls, limits)
    worst = max(observables, key=lambda o: FROM_BEST_TO_WORST.index(o.verdict))
    return RunEvidence(
        name,
        worst.verdict,
        worst.observable,
        tuple(observables),
        pulls,
        limits,
        "; ".join(_notes(observables)),
    )


def _notes(observables: Sequence[ObservableEvidence]) -> list[str]:
    return [f"{o.observable}: {o.note}" for o in observables if o.note]


def _leverage_by_experiment(fit: FitOutcome) -> list[Floats]:
    """Hat-matrix diagonal of the points of each experiment."""
    stacked = np.vstack([e.jacobian for e in fit.experiments])
    with np.errstate(divide="ignore"):
        prior_sds = 1.0 / np.sqrt(fit.prior_precision)
    fixed = np.array([p.at_bound for p in fit.parameters], dtype=bool)
    nothing = np.zeros(len(stacked))
    scales = np.array([1.0 if p.scale == "logarithmic" else max(abs(p.value), 1e-3) for p in fit.parameters])
    found = curvature(stacked, nothing, prior_sds, np.zeros(len(prior_sds)), fixed, scales)
    ends = np.cumsum([len(e.rows) for e in fit.experiments])
    return np.split(found.leverage, ends[:-1])


def _raw(e: ExperimentFit, column: int, leverage: Floats, limits: Thresholds) -> _Raw:
    name = e.observed_names[column]
    mine = e.columns == column
    n = int(mine.sum())
    if n == 0:
        return _Raw(e.name, name, 0)
    rows = e.rows[mine]
    standardised = e.standardised[rows, column]
    chi_square = float(np.sum(standardised**2))
    freedom = n - float(leverage[mine].sum())
    p = float(stats.chi2.sf(chi_square, freedom)) if freedom >= SMALLEST_FREEDOM else None
    observed = e.observed[rows, column]
    sigma = float(np.sqrt(np.mean(e.sigma[rows, column] ** 2)))
    span = float(observed.max() - observed.min())
    error = float(np.sqrt(np.mean(e.residuals[rows, column] ** 2)))
    enough = n >= limits.fewest_points_for_runs
    return _Raw(
        e.name,
        name,
        n,
        chi_square,
        freedom,
        p,
        error / max(span, 5.0 * sigma) if max(span, sigma) > 0.0 else 0.0,
        runs_test(standardised) if enough else None,
        durbin_watson(standardised),
        float(standardised[np.argmax(np.abs(standardised))]),
    )


def _adjusted_over_runs(raw: Sequence[_Raw], p: Sequence[float | None]) -> list[float | None]:
    adjusted: list[float | None] = [None] * len(raw)
    for name in dict.fromkeys(r.observable for r in raw):
        at = [i for i, r in enumerate(raw) if r.observable == name]
        for i, value in zip(at, holm([p[i] for i in at]), strict=True):
            adjusted[i] = value
    return adjusted


def _judged(
    raw: _Raw,
    chi_square_p: float | None,
    runs_p: float | None,
    *,
    known_sigma: bool,
    pulled: bool,
    limits: Thresholds,
) -> ObservableEvidence:
    notes: list[str] = []
    if known_sigma and raw.chi_square_p is not None and raw.chi_square_p > limits.too_good_p:
        notes.append(TOO_LARGE)
    if raw.n and raw.chi_square_p is None:
        notes.append("this run alone determines its parameters")
    return ObservableEvidence(
        experiment=raw.experiment,
        observable=raw.observable,
        n=raw.n,
        chi_square=raw.chi_square,
        degrees_of_freedom=raw.freedom,
        chi_square_p=raw.chi_square_p,
        chi_square_p_adjusted=chi_square_p,
        nrmse=raw.nrmse,
        runs_p=raw.runs_p,
        runs_p_adjusted=runs_p,
        durbin_watson=raw.durbin_watson,
        largest_standardised=raw.largest,
        verdict=_verdict(raw, chi_square_p, runs_p, known_sigma=known_sigma, pulled=pulled, limits=limits),
        note="; ".join(notes),
    )


def _verdict(
    raw: _Raw,
    chi_square_p: float | None,
    runs_p: float | None,
    *,
    known_sigma: bool,
    pulled: bool,
    limits: Thresholds,
) -> Verdict:
    if raw.n == 0 or raw.chi_square_p is None:
        return "not tested"
    failed = runs_p is not None and runs_p < limits.runs_p
    if known_sigma and chi_square_p is not None:
        failed = failed or chi_square_p < limits.chi_square_p
    if failed and (raw.nrmse is None or raw.nrmse > limits.nrmse):
        return "disagrees"
    if failed or pulled:
        return "strained"
    return "agrees" if known_sigma else "consistent"
