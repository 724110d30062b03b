"""How well one fitted model explains each run: tests, their verdict, and the thresholds stored with it.

All numbers come from a `FitOutcome`; nothing is integrated again.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from kinetics_db.engine.fitting.blocks import curvature_and_leverage
from kinetics_db.engine.fitting.outcome import ExperimentFit, FitOutcome
from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.residual_tests import durbin_watson, holm, runs_test
from kinetics_db.errors import InvalidInput

Floats = NDArray[np.float64]
Verdict = Literal["agrees", "consistent", "strained", "disagrees", "not tested"]
FROM_BEST_TO_WORST: tuple[Verdict, ...] = ("not tested", "agrees", "consistent", "strained", "disagrees")
TOO_LARGE = "uncertainties too large to test"
SMALLEST_FREEDOM = 0.5  # degrees of freedom below which a run is used up by its own parameters
# Multiple of the relative tolerance up to which a residual is the integrator's; a fitted sigma has the same floor.
INTEGRATION_ERROR = 100.0


@dataclass(frozen=True)
class Thresholds:
    """Where the verdicts change.

    Attributes
    ----------
    chi_square_p, runs_p : smallest Holm-adjusted p that still counts as agreement
    nrmse : largest normalised root mean square error that makes a failed test 'strained' only
    pull : largest pull of a nuisance parameter that the run uses, in standard deviations of its prior
    too_good_p : chi-square p above which the uncertainties are too large to test anything
    fewest_points_for_runs : fewest points for a runs test, those that the model meets exactly not counted
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
class PullOnRun:
    """A nuisance parameter that a run uses: its value, and how far it is from its prior in prior deviations.

    `used_by` counts the experiments that share it.
    """

    name: str
    owner: str
    value: float
    pull: float
    used_by: int


@dataclass(frozen=True)
class RunEvidence:
    """One run: its observables, the pulls of all nuisance parameters it uses or owns, and the worst verdict."""

    experiment: str
    verdict: Verdict
    worst_observable: str | None
    observables: tuple[ObservableEvidence, ...]
    pulls: tuple[PullOnRun, ...]
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


def evidence_of_runs(
    fit: FitOutcome,
    thresholds: Thresholds | None = None,
    on_work: Callable[[], None] | None = None,
    *,
    rtol: float = Settings.rtol,
) -> tuple[RunEvidence, ...]:
    """Verdict on every run of a fit, in its order.

    An observable *agrees* when the chi-square and the runs test both have p >= 0.01, *strained* when one
    fails but the error stays within 5 % of the span or when the pull of a nuisance parameter that the run
    uses, its own or shared, exceeds 3, and *disagrees* otherwise. Chi-square counts only where sigma was known
    beforehand; with a fitted sigma the strongest word is *consistent*. p-values are Holm-adjusted, each test
    and observable over the runs. A run whose own parameters take up its points is *strained* too when one of
    them is pulled so far.

    Parameters
    ----------
    fit : FitOutcome
    thresholds : where the verdicts change
    rtol : relative tolerance that the fit was integrated with; what it cannot tell from zero has no sign in
        the runs test
    on_work : called at least once a run, so that a caller who tells others of progress has something to tell

    Raises
    ------
    InvalidInput
        When the fit has no point to judge.
    """
    limits = thresholds or Thresholds()
    if not fit.experiments:
        raise InvalidInput(f"the fit has no result to judge: {fit.message}")
    leverage = _leverage_by_experiment(fit, on_work)
    raw: list[_Raw] = []
    for e, h in zip(fit.experiments, leverage, strict=True):
        raw += [_raw(e, column, h, limits, rtol) for column in range(len(e.observed_names))]
        if on_work is not None:
            on_work()
    chi = _adjusted_over_runs(raw, [r.chi_square_p for r in raw])
    runs = _adjusted_over_runs(raw, [r.runs_p for r in raw])
    known_sigma = fit.n_estimated_sigmas == 0
    found: list[RunEvidence] = []
    begin = 0
    for e, pulls in zip(fit.experiments, _pulls_on_runs(fit), strict=True):
        pulled = any(abs(p.pull) > limits.pull for p in pulls)
        observables = tuple(
            _judged(raw[i], chi[i], runs[i], known_sigma=known_sigma, pulled=pulled, limits=limits)
            for i in range(begin, begin + len(e.observed_names))
        )
        begin += len(observables)
        found.append(_run(e.name, observables, pulls, limits))
    return tuple(found)


def _pulls_on_runs(fit: FitOutcome) -> list[tuple[PullOnRun, ...]]:
    """Of each experiment the pulls that it uses or that its run owns, in the fit's order."""
    by_owner: dict[str, list[int]] = {}
    by_user: dict[str, list[int]] = {}
    found: list[PullOnRun] = []
    for i, pull in enumerate(fit.pulls):
        found.append(PullOnRun(pull.name, pull.owner, pull.value, pull.pull, len(pull.experiments)))
        by_owner.setdefault(pull.owner, []).append(i)
        for name in pull.experiments:
            by_user.setdefault(name, []).append(i)
    on_runs = (sorted({*by_owner.get(e.owner, []), *by_user.get(e.name, [])}) for e in fit.experiments)
    return [tuple(found[i] for i in positions) for positions in on_runs]


def _run(
    name: str, observables: Sequence[ObservableEvidence], pulls: tuple[PullOnRun, ...], limits: Thresholds
) -> RunEvidence:
    if not observables:
        return RunEvidence(name, "not tested", None, (), pulls, limits)
    worst = max(observables, key=lambda o: (FROM_BEST_TO_WORST.index(o.verdict), -_smallest_p(o)))
    verdict, notes = worst.verdict, _notes(observables)
    far = [p for p in pulls if abs(p.pull) > limits.pull]
    notes += [f"{p.name}: a pull of {p.pull:.2g}" for p in far]
    if far and verdict == "not tested":  # its parameters take up its points, and still one is bent
        verdict = "strained"
    return RunEvidence(name, verdict, worst.observable, tuple(observables), pulls, limits, "; ".join(notes))


def _smallest_p(o: ObservableEvidence) -> float:
    """Of both tests, adjusted; between equal verdicts the observable with the smallest tells the most."""
    return min((p for p in (o.chi_square_p_adjusted, o.runs_p_adjusted) if p is not None), default=1.0)


def _notes(observables: Sequence[ObservableEvidence]) -> list[str]:
    return [f"{o.observable}: {o.note}" for o in observables if o.note]


def _leverage_by_experiment(fit: FitOutcome, on_work: Callable[[], None] | None) -> list[Floats]:
    """Hat-matrix diagonal of the points of each experiment."""
    stacked = np.vstack([e.jacobian for e in fit.experiments])
    with np.errstate(divide="ignore"):
        prior_sds = 1.0 / np.sqrt(fit.prior_precision)
    fixed = np.array([p.at_bound for p in fit.parameters], dtype=bool)
    nothing = np.zeros(len(stacked))
    scales = np.array([1.0 if p.scale == "logarithmic" else max(abs(p.value), 1e-3) for p in fit.parameters])
    no_pulls = np.zeros(len(prior_sds))
    _, leverage = curvature_and_leverage(stacked, nothing, prior_sds, no_pulls, fixed, scales, on_work)
    ends = np.cumsum([len(e.rows) for e in fit.experiments])
    return np.split(leverage, ends[:-1])


def _raw(e: ExperimentFit, column: int, leverage: Floats, limits: Thresholds, rtol: float) -> _Raw:
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
    told_apart = np.where(
        np.abs(e.residuals[rows, column]) > _integration_error(e, column, rtol), standardised, 0.0
    )
    enough = np.count_nonzero(told_apart) >= limits.fewest_points_for_runs
    return _Raw(
        e.name,
        name,
        n,
        chi_square,
        freedom,
        p,
        error / max(span, 5.0 * sigma) if max(span, sigma) > 0.0 else 0.0,
        runs_test(told_apart) if enough else None,
        durbin_watson(standardised),
        float(standardised[np.argmax(np.abs(standardised))]),
    )


def _integration_error(e: ExperimentFit, column: int, rtol: float) -> float:
    """Size of a residual of one observable that may be the integrator's alone."""
    points = np.maximum(np.isfinite(e.observed).sum(axis=0), 1)
    sizes = np.sqrt(np.nansum(e.observed**2, axis=0) / points)
    return INTEGRATION_ERROR * rtol * max(float(sizes[column]), 1e-3 * float(sizes.max()))


def _adjusted_over_runs(raw: Sequence[_Raw], p: Sequence[float | None]) -> list[float | None]:
    adjusted: list[float | None] = [None] * len(raw)
    places: dict[str, list[int]] = {}
    for i, r in enumerate(raw):
        places.setdefault(r.observable, []).append(i)
    for at in places.values():
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
