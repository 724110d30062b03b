"""How several fitted models compare on the same data; the evidence on each run is in `run_evidence`."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

from kinetics_db.engine.fitting.outcome import FitOutcome
from kinetics_db.engine.run_evidence import ObservableEvidence as ObservableEvidence
from kinetics_db.engine.run_evidence import RunEvidence as RunEvidence
from kinetics_db.engine.run_evidence import Thresholds as Thresholds
from kinetics_db.engine.run_evidence import Verdict as Verdict
from kinetics_db.engine.run_evidence import evidence_of_runs as evidence_of_runs
from kinetics_db.errors import InvalidInput


@dataclass(frozen=True)
class ModelEvidence:
    """One fit as a whole.

    Attributes
    ----------
    n : points
    k : effective number of parameters, estimated sigmas included
    minus_two_log_likelihood : r' C^-1 r + ln det C
    sum_of_squared_pulls : over all parameters with a prior
    aicc : of -2 ln L and the squared pulls together; None when n <= k + 1 (see `why_no_aicc`)
    bic : of the same sum
    """

    n: int
    k: float
    minus_two_log_likelihood: float
    sum_of_squared_pulls: float
    aicc: float | None
    bic: float
    why_no_aicc: str = ""


@dataclass(frozen=True)
class Comparison:
    """Several fits of the same data.

    Attributes
    ----------
    evidence : by model name
    differences : AICc less the lowest AICc; None where a model has none or its fit did not converge
    weights : Akaike weights, or None with the reason in `why_no_weights`
    best : name of the model with the lowest AICc among the fits that converged, None without one
    """

    evidence: Mapping[str, ModelEvidence]
    differences: Mapping[str, float | None]
    weights: Mapping[str, float] | None
    best: str | None
    why_no_weights: str = ""


@dataclass(frozen=True)
class LikelihoodRatio:
    """Nested models: fall of -2 ln L and squared pulls together, the additional free parameters that it took,
    and the chance of as large a fall."""

    statistic: float
    degrees_of_freedom: int
    p: float


def effective_parameters(fit: FitOutcome) -> float:
    """Number of parameters that the data were asked for, estimated sigmas included.

    A parameter without a prior counts one. One with a prior counts the share that the data determine,
    1 - variance / prior variance on the fitted scale, so that the sum is the trace of (J'J + P)^-1 J'J over
    them; nothing when the data do not touch it.
    """
    total = float(fit.n_estimated_sigmas)
    for i, precision in enumerate(fit.prior_precision):
        if precision == 0.0 or not np.isfinite(fit.covariance[i, i]):
            total += 1.0
        else:
            total += min(max(1.0 - float(precision * fit.covariance[i, i]), 0.0), 1.0)
    return total


def sum_of_squared_pulls(fit: FitOutcome) -> float:
    """Sum of ((theta - mean) / sd)^2 over the parameters with a prior, on the fitted scale.

    It is what `minus_two_log_prior` holds beside the normalisation of the priors, which is the same for every
    model of the same causes of error.
    """
    precision = fit.prior_precision[fit.prior_precision > 0.0]
    return max(fit.minus_two_log_prior + float(np.sum(np.log(precision))), 0.0)


def _penalised(fit: FitOutcome) -> float:
    """-2 ln L and the squared pulls: a model pays for bending what was weighed."""
    return fit.minus_two_log_likelihood + sum_of_squared_pulls(fit)


def aicc(minus_two_log_likelihood: float, n: int, k: float) -> float | None:
    """Akaike's criterion with the correction for small samples (Hurvich & Tsai, Biometrika 76 (1989) 297).

    None when n <= k + 1. Constants that are equal for models of the same data may be left out of
    -2 ln L; n ln(RSS/n) is such a form for one fitted sigma.
    """
    if n <= k + 1:
        return None
    return minus_two_log_likelihood + 2.0 * k + 2.0 * k * (k + 1.0) / (n - k - 1.0)


def bic(minus_two_log_likelihood: float, n: int, k: float) -> float:
    """Bayesian information criterion, -2 ln L + k ln n (Schwarz, Ann. Statist. 6 (1978) 461)."""
    return minus_two_log_likelihood + k * math.log(n)


def akaike_weights(values: Sequence[float]) -> list[float]:
    """exp(-difference / 2), summing to one (Burnham & Anderson 2002)."""
    lowest = min(values)
    shares = [math.exp(-(value - lowest) / 2.0) for value in values]
    return [share / sum(shares) for share in shares]


def evidence_of_model(fit: FitOutcome) -> ModelEvidence:
    """AICc and BIC of a fit, of -2 ln L and the squared pulls together. InvalidInput without a result."""
    if not fit.experiments:
        raise InvalidInput(f"the fit has no result to judge: {fit.message}")
    k, n = effective_parameters(fit), fit.n_points
    penalised = _penalised(fit)
    value = aicc(penalised, n, k)
    why = "" if value is not None else f"{n} points are too few for {k:.3g} parameters"
    return ModelEvidence(
        n,
        k,
        fit.minus_two_log_likelihood,
        sum_of_squared_pulls(fit),
        value,
        bic(penalised, n, k),
        why,
    )


def compare(fits: Mapping[str, FitOutcome], thresholds: Thresholds | None = None) -> Comparison:
    """Models fitted to the same points with the same weights, side by side.

    A fit that did not converge is not ranked, and no Akaike weights are given then: its -2 ln L is not that of
    its model. None are given either when the residuals of the best model still run in one direction for too
    long (runs test), since -2 ln L then counts the same information more than once.

    Raises
    ------
    InvalidInput
        When the fits do not have the same data or error model, or one has no result.
    """
    if not fits:
        raise InvalidInput("there is no fit to compare")
    names = list(fits)
    evidence = {name: evidence_of_model(fit) for name, fit in fits.items()}
    for name in names[1:]:
        difference = _difference_of_data(fits[names[0]], fits[name])
        if difference:
            what = f"{names[0]} and {name} were not fitted to the same data: {difference}"
            raise InvalidInput(what, cure="fits of one dataset with one error model")
    unfinished = [name for name in names if fits[name].status != "converged"]
    known = {n: e.aicc for n, e in evidence.items() if e.aicc is not None and n not in unfinished}
    best = min(known, key=lambda name: known[name]) if known else None
    differences = {
        name: (known[name] - known[best] if best is not None and name in known else None) for name in names
    }
    reasons = [f"{name} is {fits[name].status}: {fits[name].message}" for name in unfinished]
    undefined = [name for name in names if evidence[name].aicc is None]
    if undefined:
        reasons.append(f"AICc is undefined for {', '.join(undefined)}")
    if reasons:
        return Comparison(evidence, differences, None, best, "; ".join(reasons))
    limits = thresholds or Thresholds()
    if best is not None and _autocorrelated(fits[best], limits):
        why = f"the residuals of {best} are correlated in time; compare by leaving runs out instead"
        return Comparison(evidence, differences, None, best, why)
    weights = dict(zip(known, akaike_weights(list(known.values())), strict=True))
    return Comparison(evidence, differences, weights, best)


def likelihood_ratio(
    full: FitOutcome, reduced: FitOutcome, *, constant_at_zero: bool = False
) -> LikelihoodRatio:
    """Chance of as large a fall of -2 ln L and squared pulls together if the reduced model were true (Wilks 1938).

    The degrees of freedom are the additional free parameters, those with a prior counted as any other. With one
    extra constant whose reduced value, zero, is the edge of its range, p is half as large
    (Self & Liang, J. Am. Statist. Assoc. 82 (1987) 605).

    Raises
    ------
    InvalidInput
        When the data differ, a fit did not converge, or the full model has no more parameters than the
        reduced one.
    """
    for which, fit in (("full", full), ("reduced", reduced)):
        if fit.status != "converged":
            raise InvalidInput(f"the fit of the {which} model is {fit.status}: {fit.message}")
    difference = _difference_of_data(full, reduced)
    if difference:
        raise InvalidInput(f"the models were not fitted to the same data: {difference}")
    freedom = len(full.parameters) - len(reduced.parameters)
    if freedom <= 0:
        raise InvalidInput("the full model has no more parameters than the reduced one")
    statistic = max(_penalised(reduced) - _penalised(full), 0.0)
    p = float(stats.chi2.sf(statistic, freedom))
    return LikelihoodRatio(statistic, freedom, p / 2.0 if constant_at_zero else p)


def _autocorrelated(fit: FitOutcome, limits: Thresholds) -> bool:
    return any(
        o.runs_p_adjusted is not None and o.runs_p_adjusted < limits.runs_p
        for run in evidence_of_runs(fit, limits)
        for o in run.observables
    )


def _difference_of_data(a: FitOutcome, b: FitOutcome) -> str:
    """What differs between the data of two fits, '' when nothing does."""
    if a.error_model != b.error_model:
        return f"error models {a.error_model!r} and {b.error_model!r}"
    runs = {e.name: e for e in a.experiments}
    if set(runs) != {e.name for e in b.experiments}:
        return "not the same runs"
    for other in b.experiments:
        mine = runs[other.name]
        if not np.array_equal(mine.times, other.times):
            return f"times of {other.name}"
        if not np.array_equal(mine.observed, other.observed, equal_nan=True):
            return f"values of {other.name}"
        if a.n_estimated_sigmas == 0 and not np.array_equal(mine.sigma, other.sigma, equal_nan=True):
            return f"standard uncertainties of {other.name}"
    return ""
