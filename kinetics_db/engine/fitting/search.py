"""One search with SciPy's trust-region reflective method, at fixed sigmas and off the bounds that hold."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from kinetics_db.engine.fitting.objective import Point
from kinetics_db.engine.fitting.standing import LOOSE, Standing

if TYPE_CHECKING:
    from kinetics_db.engine.fitting.descent import Descender

Floats = NDArray[np.float64]

MOST_FAILURES_IN_A_ROW = 16
HARDLY = "a full step would hardly lower the cost"


class _StalledError(Exception):
    """No trial point was better for a long while."""


class Search:
    """One call of the least-squares solver, in steps of each parameter's scale.

    The solver is given the reduced residuals and Jacobian of a point: their sum of squares, gradient and
    singular values are those of the whole, in a few rows.
    """

    def __init__(self, owner: Descender, origin: Standing, last_iteration: int) -> None:
        self._owner = owner
        self._sigmas = origin.sigmas
        self._free = np.flatnonzero(~origin.held)
        self._theta = origin.point.theta
        self._scale = owner.scale[self._free]
        self._last_iteration = last_iteration
        self._known: list[tuple[Floats, Point]] = [(np.zeros(len(self._free)), origin.point)]
        self._accepted = origin.point
        self._failures = 0
        self._asked = False
        self._lowest = self._sum_of_squares(origin.point)

    def run(self) -> tuple[Point, str]:
        """The last accepted point and how the search ended, in words."""
        owner, free = self._owner, self._free
        lower = (owner.lower - self._theta)[free] / self._scale
        upper = (owner.upper - self._theta)[free] / self._scale
        try:
            found = least_squares(
                self._residuals,
                np.zeros(len(free)),
                jac=self._jacobian,
                bounds=(lower, upper),
                method="trf",
                ftol=1e-12,
                xtol=1e-10,
                gtol=1e-14,
                x_scale=self._steps(lower, upper),
                max_nfev=10 * owner.settings.max_iterations,
                callback=self._after_iteration,
            )
        except _StalledError:
            return self._accepted, "no smaller step was better"
        endings = {
            -2: HARDLY,
            0: f"the limit of {owner.settings.max_iterations} iterations was reached",
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
        owner = self._owner
        theta = self._theta.copy()
        theta[self._free] += z * self._scale
        evaluation = owner.model.evaluate(np.clip(theta, owner.lower, owner.upper))
        if evaluation.failed is not None:
            return None
        point = owner.meet(evaluation)
        self._known = [(z.copy(), point)]  # the solver asks for the Jacobian at its last trial point only
        return point

    def _residuals(self, z: Floats) -> Floats:
        point = self._point(z)
        first, self._asked = not self._asked, True
        better = False
        total = np.inf
        if point is not None:
            total = self._sum_of_squares(point)
            better = total < self._lowest
        self._failures = 0 if better or first else self._failures + 1
        if self._failures > MOST_FAILURES_IN_A_ROW:
            raise _StalledError
        if point is None:
            # not finite: the solver shrinks its region and tries again nearer
            return np.full(self._rows, np.inf)
        if first or total <= self._lowest * (1.0 + 1e-9):
            self._lowest = min(total, self._lowest)
            return self._stacked(self._owner.standing(point, self._sigmas))
        # refused for its sum of squares, which is all that matters then and costs no decomposition
        return np.concatenate([[np.sqrt(total)], np.zeros(self._rows - 1)])

    @property
    def _rows(self) -> int:
        """Of the reduced problem, p + 1, and of the priors, p."""
        return 2 * len(self._theta) + 1

    def _jacobian(self, z: Floats) -> Floats:
        point = self._point(z)
        if point is None:  # cannot be: only finite points are accepted
            raise _StalledError
        self._accepted = point
        standing = self._owner.standing(point, self._sigmas)
        priors = np.diag(1.0 / self._owner.objective.prior_sds)
        whole = np.vstack([standing.jacobian, priors])
        return np.asarray(whole[:, self._free] * self._scale)

    @staticmethod
    def _stacked(standing: Standing) -> Floats:
        return np.concatenate([standing.residuals, standing.pulls])

    def _sum_of_squares(self, point: Point) -> float:
        return self._owner.sum_of_squares(point, self._sigmas)

    def _after_iteration(self, intermediate_result: Any) -> None:
        owner = self._owner
        owner.accepted(self._accepted)
        if owner.iterations >= self._last_iteration:
            raise StopIteration
        standing = owner.standing(self._accepted, self._sigmas)
        if standing.decrease < LOOSE or standing.crossing.any():
            raise StopIteration
