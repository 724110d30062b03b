"""What the fit minimises: -2 ln L - 2 ln prior, with the sigmas that are not tabulated profiled out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.residuals import Data, Evaluation

Floats = NDArray[np.float64]
FEWEST_ROWS = 2048  # of a block that is decomposed at once
ROWS_PER_COLUMN = 16  # so that what is carried from block to block costs little beside the blocks


@dataclass(frozen=True, eq=False)
class Point:
    """One evaluated point.

    Attributes
    ----------
    evaluation : Evaluation, its Jacobian moved to `jacobian`
    residuals : ndarray, shape (v,), model - observed
    jacobian : ndarray, shape (v, p)
    sigmas : ndarray, shape (g,), maximum-likelihood sigmas of the groups at this point
    minus_two_log_likelihood, minus_two_log_prior : float
    triangles : what `Objective.triangles` found, kept so that it is found once
    """

    evaluation: Evaluation
    residuals: Floats
    jacobian: Floats
    sigmas: Floats
    minus_two_log_likelihood: float
    minus_two_log_prior: float
    triangles: list[Floats] = field(default_factory=list)

    @property
    def theta(self) -> Floats:
        return self.evaluation.theta

    @property
    def cost(self) -> float:
        return self.minus_two_log_likelihood + self.minus_two_log_prior


class Objective:
    """Turns evaluations into costs and standardised residuals."""

    def __init__(self, data: Data, parameters: ParameterMap) -> None:
        self.data = data
        self.parameters = parameters
        self.prior_means = parameters.prior_means
        self.prior_sds = parameters.prior_sds
        self._has_prior = np.isfinite(self.prior_sds)

    def point(self, evaluation: Evaluation) -> Point:
        """Cost of an evaluation that did not fail."""
        residuals = self.data.flat(evaluation.model) - self.data.observed
        jacobian = self.data.flat(evaluation.jacobian)
        sigmas = self.data.best_sigmas(residuals)
        sigma = self.data.sigma_of_points(sigmas)
        likelihood = float(np.sum((residuals / sigma) ** 2) + 2.0 * np.sum(np.log(sigma)))
        prior = self.minus_two_log_prior(evaluation.theta)
        # the tables are as large as the Jacobian made of them and would be kept as long
        return Point(replace(evaluation, jacobian=()), residuals, jacobian, sigmas, likelihood, prior)

    def prior_residuals(self, theta: Floats) -> Floats:
        """(theta - mean)/sd, zero without a prior, shape (p,)."""
        return np.where(self._has_prior, (theta - self.prior_means) / self.prior_sds, 0.0)

    def minus_two_log_prior(self, theta: Floats) -> float:
        """Sum of pull^2 + ln(sd^2) over the parameters with a prior."""
        pulls = self.prior_residuals(theta)
        return float(np.sum(pulls**2) + 2.0 * np.sum(np.log(self.prior_sds[self._has_prior])))

    def triangles(self, point: Point, on_work: Callable[[], None] | None = None) -> list[Floats]:
        """R of the QR decomposition of [jacobian | residuals], for the points of each fitted sigma.

        One array of shape (p+1, p+1) for each group, or one over the tabulated sigmas. Found block of rows by
        block of rows, each with the R of those before (Demmel, Grigori, Hoemmen & Langou, SIAM J. Sci. Comput.
        34 (2012) A206), and once for a point: for whatever sigmas of the groups it is only divided by them.
        ``on_work`` is called after each block.
        """
        if not point.triangles:
            data = self.data
            if data.group_names:
                found = [
                    _triangle(
                        point.jacobian, point.residuals, np.flatnonzero(data.groups == g), None, on_work
                    )
                    for g in range(len(data.group_names))
                ]
            else:
                found = [_triangle(point.jacobian, point.residuals, None, data.tabulated, on_work)]
            point.triangles.extend(found)
        return point.triangles

    def reduced(
        self, point: Point, sigmas: Floats, on_work: Callable[[], None] | None = None
    ) -> tuple[Floats, Floats]:
        """Residuals (m,) and Jacobian (m, p) with the sums of squares and products of the standardised ones.

        All that a least-squares step needs, in as few rows as there are parameters and sigmas.
        """
        triangles = self.triangles(point, on_work)
        over = sigmas if self.data.group_names else np.ones(1)
        rows = np.vstack([r / sigma for r, sigma in zip(triangles, over, strict=True)])
        if len(triangles) > 1:
            rows = _upper(rows)
        return rows[:, -1], rows[:, :-1]

    def standardised(self, point: Point, sigmas: Floats) -> tuple[Floats, Floats]:
        """Residuals (v,) and Jacobian (v, p) over the sigmas of the groups."""
        sigma = self.data.sigma_of_points(sigmas)
        return point.residuals / sigma, point.jacobian / sigma[:, None]


def _upper(rows: Floats) -> Floats:
    return np.asarray(np.linalg.qr(rows, mode="r"))


def _triangle(
    jacobian: Floats,
    residuals: Floats,
    rows: NDArray[np.intp] | None,
    sigma: Floats | None,
    on_work: Callable[[], None] | None,
) -> Floats:
    v, width = len(residuals) if rows is None else len(rows), jacobian.shape[1] + 1
    size = max(FEWEST_ROWS, ROWS_PER_COLUMN * width)
    found = np.zeros((0, width))
    for begin in range(0, v, size):
        block = slice(begin, begin + size)
        at = block if rows is None else rows[block]
        both = np.column_stack([jacobian[at], residuals[at]])
        if sigma is not None:
            both = both / sigma[at][:, None]
        found = _upper(np.vstack([found, both]))
        if on_work is not None:
            on_work()
    return np.vstack([found, np.zeros((width - len(found), width))])
