"""How well the fitted sigmas are known, and so the standard errors that are made of them.

A standard error is made of the sigmas of all groups of points. Each of these is known to its own degrees of
freedom only, the standard error therefore to effective ones (Satterthwaite, Biometrics Bull. 2 (1946) 110):
variance^2 / sum over the groups of (share of the variance)^2 / (degrees of freedom of the group).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.objective import Objective, Point
from kinetics_db.engine.fitting.outcome import SigmaEstimate
from kinetics_db.engine.fitting.uncertainty import Curvature, curvature

Floats = NDArray[np.float64]

LEAST_FREEDOM = 0.99  # degrees of freedom below which a sigma says nothing; 1 with room for rounding
HANGS_ON = 0.1  # of the variance: what a parameter loses without a group of points it does not need


@dataclass(frozen=True, eq=False)
class Trust:
    """What the standard errors of the parameters are worth.

    Attributes
    ----------
    degrees_of_freedom : ndarray, shape (p,), effective; infinite where no fitted sigma enters
    why_not : length p, why the scatter that a parameter hangs on is not known, '' when it is
    """

    degrees_of_freedom: Floats
    why_not: tuple[str, ...]


def untold(estimate: SigmaEstimate, smallest: float) -> str:
    """Why the points say nothing about this sigma, '' when they do."""
    of = "" if estimate.observable is None else f" of {estimate.observable}"
    if estimate.degrees_of_freedom < LEAST_FREEDOM:
        return f"less than one degree of freedom is left to estimate the scatter{of}"
    if estimate.maximum_likelihood <= smallest * (1.0 + 1e-9):
        return f"the scatter{of} is too small to be told from the tolerance of the integration"
    return ""


def trust(
    point: Point,
    objective: Objective,
    sigmas: Floats,
    estimates: Sequence[SigmaEstimate],
    found: Curvature,
    fixed: NDArray[np.bool_],
    on_work: Callable[[], None] | None,
) -> Trust:
    """What the standard errors at these sigmas are worth.

    Parameters
    ----------
    point, objective : the end of the fit
    sigmas : ndarray, shape (g,), with which `found` was made
    estimates : of each group, with its degrees of freedom
    found : Curvature at the point
    fixed : ndarray of bool, shape (p,), parameters at a bound
    on_work : called for each group
    """
    p = len(fixed)
    data = objective.data
    if not data.group_names:
        return Trust(np.full(p, np.inf), ("",) * p)
    rows = [r / sigma for r, sigma in zip(objective.triangles(point, on_work), sigmas, strict=True)]
    covariance = found.half.T @ found.half
    variance = np.diag(covariance)
    spread = np.zeros(p)
    why = [""] * p
    for g, estimate in enumerate(estimates):
        share = np.sum((rows[g][:, :p] @ covariance) ** 2, axis=0)
        spread += share**2 / max(estimate.degrees_of_freedom, LEAST_FREEDOM)
        reason = untold(estimate, data.smallest_sigmas[g])
        if on_work is not None:
            on_work()
        if reason:
            hanging = found.determined & _hanging(rows, g, variance, point, objective, fixed)
            for i in np.flatnonzero(hanging):
                why[i] = why[i] or reason
    with np.errstate(divide="ignore", invalid="ignore"):
        freedom = np.where(spread > 0, variance**2 / spread, np.inf)
    return Trust(freedom, tuple(why))


def _hanging(
    rows: Sequence[Floats],
    g: int,
    variance: Floats,
    point: Point,
    objective: Objective,
    fixed: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Parameters that would be known noticeably worse, or not at all, without this group of points."""
    p = len(fixed)
    others = np.vstack([np.zeros((1, p + 1)), *(r for i, r in enumerate(rows) if i != g)])
    pulls = objective.prior_residuals(point.theta)
    scale = objective.parameters.scales
    without = curvature(others[:, :p], others[:, p], objective.prior_sds, pulls, fixed, scale)
    alone = np.sum(without.half**2, axis=0)
    return np.asarray(~without.determined | (variance < (1.0 - HANGS_ON) * alone))
