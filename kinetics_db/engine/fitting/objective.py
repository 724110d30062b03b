"""What the fit minimises: -2 ln L - 2 ln prior, with the sigmas that are not tabulated profiled out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.residuals import Data, Evaluation

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Point:
    """One evaluated point.

    Attributes
    ----------
    evaluation : Evaluation
    residuals : ndarray, shape (v,), model - observed
    jacobian : ndarray, shape (v, p)
    sigmas : ndarray, shape (g,), maximum-likelihood sigmas of the groups at this point
    minus_two_log_likelihood, minus_two_log_prior : float
    """

    evaluation: Evaluation
    residuals: Floats
    jacobian: Floats
    sigmas: Floats
    minus_two_log_likelihood: float
    minus_two_log_prior: float

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
        return Point(
            evaluation, residuals, jacobian, sigmas, likelihood, self.minus_two_log_prior(evaluation.theta)
        )

    def prior_residuals(self, theta: Floats) -> Floats:
        """(theta - mean)/sd, zero without a prior, shape (p,)."""
        return np.where(self._has_prior, (theta - self.prior_means) / self.prior_sds, 0.0)

    def minus_two_log_prior(self, theta: Floats) -> float:
        """Sum of pull^2 + ln(sd^2) over the parameters with a prior."""
        pulls = self.prior_residuals(theta)
        return float(np.sum(pulls**2) + 2.0 * np.sum(np.log(self.prior_sds[self._has_prior])))

    def standardised(self, point: Point, sigmas: Floats) -> tuple[Floats, Floats]:
        """Residuals (v,) and Jacobian (v, p) over the sigmas of the groups."""
        sigma = self.data.sigma_of_points(sigmas)
        return point.residuals / sigma, point.jacobian / sigma[:, None]
