"""Uncertainty of a fitted point from the curvature of its sum of squares.

Covariance (J'J + P)^-1 of the standardised problem on the fitted scale, with P the precisions of the priors
(Bard, Nonlinear Parameter Estimation, 1974; Seber & Wild, Nonlinear Regression, 1989), through the singular
value decomposition of the column-scaled matrix, so that what the data do not determine is found and named
instead of inverted.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Exact sensitivities carry a tenth of this relative error; flatter directions are not determined.
SMALLEST_SINGULAR_VALUE = 1e-5
LARGEST_SHARE_OF_FLAT_DIRECTION = 1e-4
INERT = 1e-9  # of a sigma, for a natural step of the parameter
WIDEST_INTERVAL = math.log(100.0)  # on a logarithmic scale, to each side


@dataclass(frozen=True, eq=False)
class Curvature:
    """The standardised problem near a point, decomposed.

    Attributes
    ----------
    basis : ndarray, shape (v, r), orthonormal where no priors act; hat matrix = basis @ basis.T
    half : ndarray, shape (r, p), half.T @ half is the covariance in the directions that are determined, zero
        in rows and columns of what does not act or is held at a bound
    covariance : ndarray, shape (p, p), NaN in rows and columns of what is not determined or held at a bound
    determined : ndarray of bool, shape (p,)
    inert : ndarray of bool, shape (p,), no effect on any point and no prior
    flat : ndarray, shape (p, p), projector onto the directions that are not determined, in scaled parameters
    step : ndarray, shape (p,), the full Gauss-Newton step in the determined directions
    decrease : by how much that step would lower the sum of squares
    """

    basis: Floats
    half: Floats
    covariance: Floats
    determined: NDArray[np.bool_]
    inert: NDArray[np.bool_]
    flat: Floats
    step: Floats
    decrease: float

    @property
    def leverage(self) -> Floats:
        """Diagonal of the hat matrix, shape (v,)."""
        return np.asarray(np.sum(self.basis**2, axis=1))


def curvature(
    jacobian: Floats,
    residuals: Floats,
    prior_sds: Floats,
    prior_residuals: Floats,
    fixed: NDArray[np.bool_] | None = None,
    scales: Floats | None = None,
) -> Curvature:
    """Decompose the standardised Jacobian together with the priors.

    Parameters
    ----------
    jacobian : ndarray, shape (v, p), d(standardised residual)/d(fitted-scale parameter)
    residuals : ndarray, shape (v,)
    prior_sds : ndarray, shape (p,), infinite without a prior
    prior_residuals : ndarray, shape (p,), (theta - mean)/sd, zero without a prior
    fixed : ndarray of bool, shape (p,), parameters to leave out, such as those at a bound
    scales : ndarray, shape (p,), a natural step of each parameter, 1 when None; one that moves no residual
        by a billionth of its sigma in such a step is inert
    """
    v, p = jacobian.shape
    moving = np.ones(p, dtype=bool) if fixed is None else ~fixed
    stacked = np.vstack([jacobian, np.diag(1.0 / prior_sds)])[:, moving]
    norms = np.sqrt(np.sum(stacked**2, axis=0))
    acting = norms * (1.0 if scales is None else scales[moving]) > INERT
    scaled = stacked[:, acting] / norms[acting]
    u, s, vt = np.linalg.svd(scaled, full_matrices=False)
    kept = s > SMALLEST_SINGULAR_VALUE * (s[0] if s.size else 1.0)
    flat_share = np.sum(vt[~kept] ** 2, axis=0)
    fixed_by_data = flat_share < LARGEST_SHARE_OF_FLAT_DIRECTION
    small_half = (vt[kept] / s[kept, None]) / norms[acting]
    small = small_half.T @ small_half
    small[~fixed_by_data] = np.nan
    small[:, ~fixed_by_data] = np.nan
    positions = np.flatnonzero(moving)
    at = positions[acting]
    half = np.zeros((len(small_half), p))
    half[:, at] = small_half
    covariance = np.full((p, p), np.nan)
    covariance[np.ix_(at, at)] = small
    determined = np.zeros(p, dtype=bool)
    determined[at] = fixed_by_data
    inert = np.zeros(p, dtype=bool)
    inert[positions[~acting]] = True
    everything = np.concatenate([residuals, prior_residuals])
    flat = np.zeros((p, p))
    flat[np.ix_(at, at)] = vt[~kept].T @ vt[~kept]
    along = u[:, kept].T @ everything
    step = -half.T @ along
    return Curvature(u[:v, kept], half, covariance, determined, inert, flat, step, float(np.sum(along**2)))


def pushed_against_bounds(
    theta: Floats, lower: Floats, upper: Floats, gradient: Floats, near: Floats | float = 0.0
) -> NDArray[np.bool_]:
    """Parameters at a bound, or no farther than ``near`` from it, that the fit would cross, shape (p,)."""
    at_lower = (theta - lower <= near) & (gradient > 0)
    at_upper = (upper - theta <= near) & (gradient < 0)
    return np.asarray(at_lower | at_upper)


def why_not_determined(
    name: str, inert: bool, at_bound: bool, partners: Sequence[str], *, bound_given: bool = True
) -> str:
    """Why a parameter has no interval, in words."""
    if at_bound:
        return f"{name} is pushed against {'its bound' if bound_given else 'the limit of the search'}"
    if inert:
        return f"{name} has no effect on any fitted point"
    if partners:
        return f"only a combination of {name} with {', '.join(partners)} is determined"
    return f"the data fix {name} to no better than a factor of 100"
