"""From the best point of a fit to its outcome: sigmas, covariance, intervals, residuals, pulls."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from kinetics_db.engine.fitting.blocks import curvature_and_leverage
from kinetics_db.engine.fitting.descent import Descent
from kinetics_db.engine.fitting.objective import Objective, Point
from kinetics_db.engine.fitting.outcome import (
    ExperimentFit,
    FitOutcome,
    FittedParameter,
    Minimum,
    NuisancePull,
    SigmaEstimate,
)
from kinetics_db.engine.fitting.parameters import FreeParameter
from kinetics_db.engine.fitting.problem import Experiment, Nuisance, Settings
from kinetics_db.engine.fitting.scatter import LEAST_FREEDOM, Trust, trust
from kinetics_db.engine.fitting.standing import standing_of
from kinetics_db.engine.fitting.uncertainty import (
    WIDEST_INTERVAL,
    Curvature,
    why_not_determined,
)

Floats = NDArray[np.float64]
PARTNERS = 0.99  # correlation of parameters of which only a combination is determined
SHARED_DIRECTION = 0.05  # element of the projector onto flat directions
SET_BY_PRIOR = 0.8  # of the width of the prior's interval


def report(
    descent: Descent,
    experiments: Sequence[Experiment],
    nuisances: Sequence[Nuisance],
    objective: Objective,
    settings: Settings,
    *,
    minima: tuple[Minimum, ...],
    iterations: int,
    evaluations: int,
    seconds: float,
    on_work: Callable[[], None] | None = None,
) -> FitOutcome:
    """The outcome of the fit that ended in this descent; ``on_work`` is called every now and then."""
    point = descent.point
    if point is None:
        return FitOutcome(
            status=descent.status,
            message=descent.message,
            n_points=objective.data.n,
            error_model=settings.error_model,
            confidence=settings.confidence,
            iterations=iterations,
            evaluations=evaluations,
            seconds=seconds,
        )
    data = objective.data
    spread = _spread(point, objective, on_work)
    quantile, kind = _quantile(spread.degrees_of_freedom, settings, estimated=bool(data.group_names))
    standardised = point.residuals / spread.sigma_of_points
    return FitOutcome(
        status=descent.status,
        message=descent.message,
        cost=point.cost,
        minus_two_log_likelihood=point.minus_two_log_likelihood,
        minus_two_log_prior=point.minus_two_log_prior,
        residual_sum_of_squares=float(np.sum(point.residuals**2)),
        weighted_residual_sum_of_squares=float(np.sum(standardised**2)),
        n_points=data.n,
        n_estimated_sigmas=len(data.group_names),
        error_model=settings.error_model,
        confidence=settings.confidence,
        sigmas=spread.estimates,
        parameters=_parameters(point, objective, spread, settings),
        theta=point.theta,
        covariance=spread.curvature.covariance,
        prior_precision=1.0 / objective.prior_sds**2,
        degrees_of_freedom=spread.degrees_of_freedom,
        quantile=quantile,
        quantile_kind=kind,
        experiments=_experiments(point, experiments, objective, spread),
        pulls=_pulls(point, experiments, nuisances, objective),
        minima=minima,
        iterations=iterations,
        evaluations=evaluations,
        seconds=seconds,
    )


@dataclass(frozen=True, eq=False)
class _Spread:
    curvature: Curvature
    at_bound: NDArray[np.bool_]
    trust: Trust
    estimates: tuple[SigmaEstimate, ...]
    sigma_of_points: Floats  # (v,)
    degrees_of_freedom: float


def _spread(point: Point, objective: Objective, on_work: Callable[[], None] | None) -> _Spread:
    """Sigmas with their degrees of freedom, and the curvature at them."""
    data, parameters = objective.data, objective.parameters
    pulls = objective.prior_residuals(point.theta)
    at_bound, scale = standing_of(objective, point, point.sigmas, on_work).held, parameters.scales
    residuals, jacobian = objective.standardised(point, point.sigmas)
    found, leverage = curvature_and_leverage(
        jacobian, residuals, objective.prior_sds, pulls, at_bound, scale, on_work
    )
    estimates: list[SigmaEstimate] = []
    sigmas = point.sigmas.copy()
    for g, name in enumerate(data.group_names):
        mine = data.groups == g
        n = int(mine.sum())
        freedom = n - float(leverage[mine].sum())
        rss = float(np.sum(point.residuals[mine] ** 2))
        value = None
        if freedom >= LEAST_FREEDOM:
            value = sigmas[g] = max(float(np.sqrt(rss / freedom)), float(data.smallest_sigmas[g]))
        estimates.append(SigmaEstimate(name, value, float(point.sigmas[g]), n, freedom))
    if data.group_names:
        residuals, jacobian = objective.standardised(point, sigmas)
        found, leverage = curvature_and_leverage(
            jacobian, residuals, objective.prior_sds, pulls, at_bound, scale, on_work
        )
    worth = trust(point, objective, sigmas, estimates, found, at_bound, on_work)
    untold = np.array([bool(why) for why in worth.why_not], dtype=bool)
    if untold.any():  # no scatter to judge these by
        covariance = found.covariance.copy()
        covariance[untold] = np.nan
        covariance[:, untold] = np.nan
        found = replace(found, covariance=covariance, determined=found.determined & ~untold)
    freedom = data.n - float(leverage.sum())
    return _Spread(found, at_bound, worth, tuple(estimates), data.sigma_of_points(sigmas), freedom)


def _quantile(
    degrees_of_freedom: float, settings: Settings, *, estimated: bool
) -> tuple[float, Literal["normal", "Student's t"]]:
    level = 0.5 + settings.confidence / 2.0
    if estimated and 1e-6 < degrees_of_freedom < np.inf:
        return float(stats.t.ppf(level, degrees_of_freedom)), "Student's t"
    return _normal(settings), "normal"


def _parameters(
    point: Point, objective: Objective, spread: _Spread, settings: Settings
) -> tuple[FittedParameter, ...]:
    values = objective.parameters.values(point.theta)
    return tuple(
        _parameter(i, p, float(values[i]), float(point.theta[i]), objective, spread, settings)
        for i, p in enumerate(objective.parameters.parameters)
    )


def _parameter(
    i: int,
    parameter: FreeParameter,
    value: float,
    theta: float,
    objective: Objective,
    spread: _Spread,
    settings: Settings,
) -> FittedParameter:
    found = spread.curvature
    freedom = float(spread.trust.degrees_of_freedom[i])
    quantile, _ = _quantile(freedom, settings, estimated=True)
    error = float(np.sqrt(found.covariance[i, i])) if found.determined[i] else np.inf
    wide = parameter.positive and parameter.prior_sd is None and quantile * error > WIDEST_INTERVAL
    determined = bool(found.determined[i]) and not wide
    at_bound = bool(spread.at_bound[i])
    given = _bound_given(parameter, theta)
    why = spread.trust.why_not[i]
    if not determined and not why:
        partners = [] if found.inert[i] or at_bound else _partners(i, objective, found)
        why = why_not_determined(parameter.name, bool(found.inert[i]), at_bound, partners, bound_given=given)
    prior_width = None
    if parameter.prior_sd is not None:
        prior_width = float(objective.prior_sds[i] * _normal(settings))
    prior_mean = parameter.prior_mean
    return FittedParameter(
        name=parameter.name,
        base=parameter.base,
        kind=parameter.kind,
        place=parameter.place,
        value=value,
        standard_error=(value * error if parameter.positive else error) if determined else None,
        lower=parameter.value(theta - quantile * error) if determined else None,
        upper=parameter.value(theta + quantile * error) if determined else None,
        scale="logarithmic" if parameter.positive else "linear",
        at_bound=at_bound and given,
        determined=determined,
        set_by_prior=prior_width is not None and determined and quantile * error > SET_BY_PRIOR * prior_width,
        prior_mean=None if prior_mean is None else parameter.value(prior_mean),
        prior_sd=parameter.prior_sd,
        why_not=why,
        degrees_of_freedom=freedom if determined and freedom < np.inf else None,
    )


def _bound_given(parameter: FreeParameter, theta: float) -> bool:
    """Whether the nearer limit of a parameter is a bound that was given."""
    lower, upper = parameter.limits
    return parameter.bounded[0 if theta - lower < upper - theta else 1]


def _normal(settings: Settings) -> float:
    return float(stats.norm.ppf(0.5 + settings.confidence / 2.0))


def _partners(i: int, objective: Objective, found: Curvature) -> list[str]:
    """Other parameters that only act together with this one, at most five."""
    names = [p.name for p in objective.parameters.parameters]
    others = [j for j in range(len(names)) if j != i and not found.inert[j]]
    if not found.determined[i]:
        return [names[j] for j in others if abs(found.flat[i, j]) > SHARED_DIRECTION][:5]
    errors = np.sqrt(np.diag(found.covariance))
    with np.errstate(invalid="ignore"):
        correlation = found.covariance[i] / (errors[i] * errors)
    return [names[j] for j in others if abs(correlation[j]) > PARTNERS][:5]


def _experiments(
    point: Point, experiments: Sequence[Experiment], objective: Objective, spread: _Spread
) -> tuple[ExperimentFit, ...]:
    found: list[ExperimentFit] = []
    begin = 0
    for e, mask, model in zip(experiments, objective.data.masks, point.evaluation.model, strict=True):
        end = begin + int(mask.sum())
        sigma = np.full(mask.shape, np.nan)
        sigma[mask] = spread.sigma_of_points[begin:end]
        residuals = np.where(mask, e.values - model, np.nan)
        rows, columns = np.nonzero(mask)
        found.append(
            ExperimentFit(
                name=e.name,
                times=e.times,
                observed_names=e.observed,
                observed=np.where(mask, e.values, np.nan),
                model=model,
                residuals=residuals,
                sigma=sigma,
                standardised=residuals / sigma,
                rows=rows,
                columns=columns,
                jacobian=point.jacobian[begin:end] / spread.sigma_of_points[begin:end, None],
                nuisances=nuisances_of(e),
                owner=e.owner or e.name,
            )
        )
        begin = end
    return tuple(found)


def nuisances_of(experiment: Experiment) -> tuple[str, ...]:
    """Nuisance parameters that an experiment uses, each once."""
    names = [f for charge in experiment.charges for f in charge.factors]
    names += [f for factors in experiment.signal_factors.values() for f in factors]
    if experiment.time_shift is not None:
        names.append(experiment.time_shift)
    return tuple(dict.fromkeys(names))


def _pulls(
    point: Point, experiments: Sequence[Experiment], nuisances: Sequence[Nuisance], objective: Objective
) -> tuple[NuisancePull, ...]:
    pulls = objective.prior_residuals(point.theta)
    values = objective.parameters.values(point.theta)
    users: dict[str, list[str]] = {n.name: [] for n in nuisances}
    for experiment in experiments:
        for name in nuisances_of(experiment):
            users[name].append(experiment.name)
    found = []
    for nuisance in nuisances:
        i = objective.parameters.index(nuisance.name)
        found.append(
            NuisancePull(
                nuisance.name, nuisance.owner, float(values[i]), float(pulls[i]), tuple(users[nuisance.name])
            )
        )
    return tuple(found)
