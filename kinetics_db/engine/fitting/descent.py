"""One descent from one start: trust-region least squares, and the profiled sigmas around it.

SciPy's trust-region reflective method (Branch, Coleman & Li, SIAM J. Sci. Comput. 21 (1999) 1) on exact
Jacobians. It ends when a full Gauss-Newton step would no longer lower -2 ln L noticeably (in the spirit of the
relative offset, Bates & Watts, Technometrics 23 (1981) 179); a few full steps then sharpen the point.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from kinetics_db.engine.fitting.objective import Objective, Point
from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.fitting.residuals import Evaluation, InterruptedFitError, Model
from kinetics_db.engine.fitting.uncertainty import Curvature, curvature, pushed_against_bounds

Floats = NDArray[np.float64]
DescentStatus = Literal["converged", "stopped", "not converged", "cannot start"]

TIGHT = 1e-13  # further fall of -2 ln L, per point, that counts as none
LOOSE = 1e-5  # fall of -2 ln L, 0.003 standard errors, below which the search hands over to full steps
MOST_POLISHING_STEPS = 10
MOST_SEARCHES = 3
MOST_FAILURES_IN_A_ROW = 16
HARDLY = "a full step would hardly lower the cost"
MOST_SIGMA_ROUNDS = 60
SIGMA_TOLERANCE = 1e-6


@dataclass(frozen=True, eq=False)
class Descent:
    """Where a descent ended.

    Attributes
    ----------
    status : 'cannot start' when the model cannot be integrated at the start
    point : the best point, None when there is none
    """

    status: DescentStatus
    message: str
    point: Point | None
    iterations: int = 0


class _StalledError(Exception):
    """No trial point was better for a long while."""


class Descender:
    """Runs descents on one problem and remembers the best point seen."""

    def __init__(
        self,
        model: Model,
        objective: Objective,
        settings: Settings,
        on_progress: Callable[[int, float], None] | None,
    ) -> None:
        self.model = model
        self.objective = objective
        self.best: Point | None = None  # lowest cost at its own sigmas, kept for a search that is cut short
        self.iterations = 0
        self._negligible = TIGHT * max(objective.data.n, 1)
        self._settings = settings
        self._on_progress = on_progress
        parameters = objective.parameters
        self._lower, self._upper = parameters.bounds
        self._scale = np.array([p.scale for p in parameters.parameters])

    def descend(self, theta: Floats) -> Descent:
        """From theta to the nearest minimum, within the settings' limits."""
        begun = self.iterations
        self.best = None
        status: DescentStatus
        try:
            evaluation = self.model.evaluate(theta)
            if evaluation.failed is not None:
                return Descent("cannot start", _failure(evaluation), None)
            current, status, message = self._rounds(self._meet(evaluation), begun)
            if status == "converged":
                self.best = current
        except InterruptedFitError as interruption:
            status, message = "stopped", str(interruption)
            if self.best is None:
                message += " before the first evaluation was complete"
        return Descent(status, message, self.best, self.iterations - begun)

    def _rounds(self, current: Point, begun: int) -> tuple[Point, Literal["converged", "not converged"], str]:
        """Alternate the parameters and the profiled sigmas to their fixed point."""
        for _ in range(MOST_SIGMA_ROUNDS):
            sigmas = current.sigmas
            current, converged, message = self._minimise(current, sigmas, begun)
            if not converged:
                return current, "not converged", message
            # with one common sigma and no prior a second round only sharpens the criterion
            if np.allclose(np.log(current.sigmas), np.log(sigmas), rtol=0, atol=SIGMA_TOLERANCE):
                return current, "converged", message
        return current, "not converged", "the standard uncertainties did not settle"

    def _meet(self, evaluation: Evaluation) -> Point:
        point = self.objective.point(evaluation)
        if self.best is None or point.cost < self.best.cost:
            self.best = point
        return point

    def _minimise(self, current: Point, sigmas: Floats, begun: int) -> tuple[Point, bool, str]:
        ending = HARDLY
        if not self.hardly_falls(current, sigmas):
            for _ in range(MOST_SEARCHES):  # a fresh trust region helps where the last one shrank away
                current, ending = _Search(self, current, sigmas, begun).run()
                used_up = self.iterations - begun >= self._settings.max_iterations
                if used_up or self.hardly_falls(current, sigmas):
                    break
        remaining = self._curvature(current, sigmas).decrease
        if remaining >= LOOSE:
            what = f"{ending}, though a full step should lower -2 ln L by {remaining:.3g}"
            return current, False, what
        current, remaining = self._polish(current, sigmas, remaining)
        return current, True, f"a full step would lower -2 ln L by {remaining:.1e} only"

    def _polish(self, current: Point, sigmas: Floats, decrease: float) -> tuple[Point, float]:
        """Last full steps, judged by the fall still to come, since the fall itself drowns in integration noise."""
        for _ in range(MOST_POLISHING_STEPS):
            if decrease < self._negligible:
                break
            theta = current.theta + self._curvature(current, sigmas).step
            if np.any(theta < self._lower) or np.any(theta > self._upper):
                break
            evaluation = self.model.evaluate(theta)
            if evaluation.failed is not None:
                break
            point = self._meet(evaluation)
            left = self._curvature(point, sigmas).decrease
            if left >= decrease:
                break
            current, decrease = point, left
            self.accepted(current)
        return current, decrease

    def _curvature(self, point: Point, sigmas: Floats) -> Curvature:
        residuals, jacobian = self.objective.standardised(point, sigmas)
        pulls = self.objective.prior_residuals(point.theta)
        gradient = jacobian.T @ residuals + pulls / self.objective.prior_sds
        fixed = pushed_against_bounds(point.theta, self._lower, self._upper, gradient, self._scale)
        return curvature(jacobian, residuals, self.objective.prior_sds, pulls, fixed, self._scale)

    def hardly_falls(self, point: Point, sigmas: Floats) -> bool:
        """Whether a full Gauss-Newton step inside the bounds would no longer lower the cost noticeably."""
        return self._curvature(point, sigmas).decrease < LOOSE

    def accepted(self, point: Point) -> None:
        """Count an iteration and tell of it."""
        self.iterations += 1
        if self._on_progress is not None:
            self._on_progress(self.iterations, point.cost)


class _Search:
    """One call of the least-squares solver at fixed sigmas, in steps of each parameter's scale."""

    def __init__(self, owner: Descender, origin: Point, sigmas: Floats, begun: int) -> None:
        self._owner = owner
        self._origin = origin
        self._sigmas = sigmas
        self._last_iteration = begun + owner._settings.max_iterations
        self._known: list[tuple[Floats, Point]] = [(np.zeros_like(origin.theta), origin)]
        self._accepted = origin
        self._failures = 0
        self._lowest = self._sum_of_squares(origin)

    def run(self) -> tuple[Point, str]:
        """The last accepted point and how the search ended, in words."""
        owner = self._owner
        scale, theta = owner._scale, self._origin.theta
        lower, upper = (owner._lower - theta) / scale, (owner._upper - theta) / scale
        try:
            found = least_squares(
                self._residuals,
                np.zeros_like(theta),
                jac=self._jacobian,
                bounds=(lower, upper),
                method="trf",
                ftol=1e-12,
                xtol=1e-10,
                gtol=1e-14,
                x_scale=self._steps(lower, upper),
                max_nfev=10 * owner._settings.max_iterations,
                callback=self._after_iteration,
            )
        except _StalledError:
            return self._accepted, "no smaller step was better"
        endings = {
            -2: HARDLY,
            0: f"the limit of {owner._settings.max_iterations} iterations was reached",
            1: "the gradient vanished",
            2: "the cost no longer fell",
            3: "the steps became negligible",
            4: "the cost no longer fell and the steps became negligible",
        }
        if found.status == -2 and owner.iterations >= self._last_iteration:
            return self._accepted, endings[0]
        return self._accepted, endings.get(found.status, "the search ended")

    @staticmethod
    def _steps(lower: Floats, upper: Floats) -> Floats:
        """The solver multiplies steps by the root of the distance to a finite bound; this takes it out."""
        nearest = np.maximum(np.minimum(-lower, upper), 1.0)
        return np.asarray(np.where(np.isfinite(nearest), 1.0 / np.sqrt(nearest), 1.0))

    def _point(self, z: Floats) -> Point | None:
        for known, point in self._known:
            if np.array_equal(known, z):
                return point
        evaluation = self._owner.model.evaluate(self._origin.theta + z * self._owner._scale)
        if evaluation.failed is not None:
            return None
        point = self._owner._meet(evaluation)
        self._known = [(z.copy(), point)]  # the solver asks for the Jacobian at its last trial point only
        return point

    def _residuals(self, z: Floats) -> Floats:
        point = self._point(z)
        better = False
        if point is not None:
            total = self._sum_of_squares(point)
            better = total < self._lowest
            self._lowest = min(total, self._lowest)
        self._failures = 0 if better or z.any() == 0 else self._failures + 1
        if self._failures > MOST_FAILURES_IN_A_ROW:
            raise _StalledError
        if point is None:
            # not finite: the solver shrinks its region and tries again nearer
            return np.full(self._owner.objective.data.n + len(z), np.inf)
        return self._stacked(point)

    def _jacobian(self, z: Floats) -> Floats:
        point = self._point(z)
        if point is None:  # cannot be: only finite points are accepted
            raise _StalledError
        self._accepted = point
        objective = self._owner.objective
        _, jacobian = objective.standardised(point, self._sigmas)
        priors = np.diag(1.0 / objective.prior_sds)
        return np.asarray(np.vstack([jacobian, priors]) * self._owner._scale)

    def _stacked(self, point: Point) -> Floats:
        objective = self._owner.objective
        residuals, _ = objective.standardised(point, self._sigmas)
        return np.concatenate([residuals, objective.prior_residuals(point.theta)])

    def _sum_of_squares(self, point: Point) -> float:
        return float(np.sum(self._stacked(point) ** 2))

    def _after_iteration(self, intermediate_result: Any) -> None:
        self._owner.accepted(self._accepted)
        if self._owner.iterations >= self._last_iteration:
            raise StopIteration
        if self._owner.hardly_falls(self._accepted, self._sigmas):
            raise StopIteration


def _failure(evaluation: Evaluation) -> str:
    return f"{evaluation.failed}: {evaluation.reason}" if evaluation.failed else evaluation.reason
