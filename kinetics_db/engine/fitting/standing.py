"""How a point of a fit stands: which bounds hold it, what the next full step is and what it would gain."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.objective import Objective, Point
from kinetics_db.engine.fitting.uncertainty import Curvature, curvature, pushed_against_bounds

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

LOOSE = 1e-5  # fall of -2 ln L, 0.003 standard errors, that is no longer worth a search
WEAK = 1e-3  # of a sigma, over all points, for a change of the parameter that would matter: no effect
NEAR_A_BOUND = 1e-3  # of a parameter's scale, or of the width between its bounds


@dataclass(frozen=True, eq=False)
class Standing:
    """A point at given sigmas.

    Attributes
    ----------
    residuals, jacobian : ndarray, shapes (m,) and (m, p), reduced by `Objective.reduced`
    pulls : ndarray, shape (p,), (theta - mean)/sd of the priors
    held : ndarray of bool, shape (p,), exactly at a bound that the fit would cross
    beyond : ndarray of bool, shape (p,), others that a full step would carry across a bound
    crossing : ndarray of bool, shape (p,), those of `beyond` that are near their bound
    effects : ndarray, shape (p,), change of the points in sigmas for a change that would matter
    found : the problem at this point without what is held and what has ceased to matter
    """

    point: Point
    sigmas: Floats
    residuals: Floats
    jacobian: Floats
    pulls: Floats
    held: Flags
    beyond: Flags
    crossing: Flags
    effects: Floats
    found: Curvature

    @property
    def decrease(self) -> float:
        """By how much a full step would lower -2 ln L."""
        return self.found.decrease


def standing_of(
    objective: Objective, point: Point, sigmas: Floats, on_work: Callable[[], None] | None = None
) -> Standing:
    """How a point stands when the groups have these sigmas; ``on_work`` is called after each decomposition."""
    parameters = objective.parameters
    (lower, upper), scale = parameters.bounds, parameters.scales
    residuals, jacobian = objective.reduced(point, sigmas, on_work)
    pulls = objective.prior_residuals(point.theta)
    gradient = jacobian.T @ residuals + pulls / objective.prior_sds
    held = pushed_against_bounds(point.theta, lower, upper, gradient)
    sizes = parameters.sizes
    effects = np.sqrt(np.sum(jacobian**2, axis=0)) * sizes
    # a constant on its way to zero or infinity ceases to matter; its full step would be endless and gain nothing
    idle = (effects < WEAK) & (np.abs(gradient) * sizes < LOOSE / 4) & np.isinf(objective.prior_sds)
    found = curvature(jacobian, residuals, objective.prior_sds, pulls, held | idle, scale)
    if on_work is not None:
        on_work()
    target = point.theta + found.step
    near = NEAR_A_BOUND * np.minimum(scale, upper - lower)
    beyond = ((target < lower) & (gradient > 0)) | ((target > upper) & (gradient < 0))
    crossing = beyond & pushed_against_bounds(point.theta, lower, upper, gradient, near)
    return Standing(point, sigmas, residuals, jacobian, pulls, held, beyond, crossing, effects, found)
