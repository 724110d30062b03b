"""One descent from one start: trust-region least squares, and the profiled sigmas around it.

SciPy's trust-region reflective method (Branch, Coleman & Li, SIAM J. Sci. Comput. 21 (1999) 1) on exact
Jacobians. It ends when a full Gauss-Newton step would no longer lower -2 ln L noticeably (in the spirit of the
relative offset, Bates & Watts, Technometrics 23 (1981) 179); a few full steps then sharpen the point. A parameter
that comes near a bound with the step leading across is set on the bound and stays there as long as the fit would
cross it (an active set: Nocedal & Wright, Numerical Optimization, 2006, chapter 16); the others have to satisfy
the criterion.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.elsewhere import lowest_decade
from kinetics_db.engine.fitting.objective import Objective, Point
from kinetics_db.engine.fitting.parameters import FARTHEST
from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.fitting.residuals import Evaluation, InterruptedFitError, Model
from kinetics_db.engine.fitting.search import HARDLY, Search
from kinetics_db.engine.fitting.standing import LOOSE, WEAK, Flags, Standing, standing_of

Floats = NDArray[np.float64]
DescentStatus = Literal["converged", "stopped", "not converged", "cannot start"]

TIGHT = 1e-13  # further fall of -2 ln L, per point, that counts as none
MOST_POLISHING_STEPS = 10
MOST_SEARCHES = 3  # that ended nowhere
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


@dataclass(frozen=True, eq=False)
class _End:
    point: Point
    converged: bool
    message: str


class Descender:
    """Runs descents on one problem and remembers the best point seen.

    Attributes
    ----------
    lower, upper, scale : ndarray, shape (p,), limits and typical steps on the fitted scale
    best : lowest cost of this descent at its own sigmas, kept for a descent that is cut short
    iterations : of all descents
    """

    def __init__(
        self,
        model: Model,
        objective: Objective,
        settings: Settings,
        on_progress: Callable[[int, float], None] | None,
    ) -> None:
        self.model = model
        self.objective = objective
        self.settings = settings
        self.best: Point | None = None
        self.iterations = 0
        self.lower, self.upper = objective.parameters.bounds
        self.scale = objective.parameters.scales
        self._negligible = TIGHT * max(objective.data.n, 1)
        self._on_progress = on_progress
        self._standing: Standing | None = None
        self._first = True

    def descend(self, theta: Floats) -> Descent:
        """From theta to the nearest minimum, within the settings' limits.

        The first descent, when it ends where constants have no effect, is repeated from other decades.
        """
        begun = self.iterations
        self.best = None
        first, self._first = self._first, False
        status: DescentStatus
        try:
            evaluation = self.model.evaluate(theta)
            if evaluation.failed is not None:
                return Descent("cannot start", _failure(evaluation), None)
            start = self.meet(evaluation)
            end = self._rounds(start)
            if first:
                for point in self._elsewhere(start, end):
                    other = self._rounds(point)
                    end = other if other.point.cost < end.point.cost - LOOSE else end
            end = self._judged(end)
            status, message = "converged" if end.converged else "not converged", end.message
            if end.converged or self.best is None or end.point.cost < self.best.cost + LOOSE:
                self.best = end.point
        except InterruptedFitError as interruption:
            status, message = "stopped", str(interruption)
            if self.best is None:
                message += " before the first evaluation was complete"
        return Descent(status, message, self.best, self.iterations - begun)

    def _rounds(self, current: Point) -> _End:
        """Alternate the parameters and the profiled sigmas to their fixed point."""
        last = self.iterations + self.settings.max_iterations
        for _ in range(MOST_SIGMA_ROUNDS):
            sigmas = current.sigmas
            current, converged, message = self._minimise(current, sigmas, last)
            if not converged:
                return _End(current, False, message)
            # with one common sigma and no prior a second round only sharpens the criterion
            if np.allclose(np.log(current.sigmas), np.log(sigmas), rtol=0, atol=SIGMA_TOLERANCE):
                return _End(current, True, message)
        return _End(current, False, "the standard uncertainties did not settle")

    def _elsewhere(self, start: Point, end: _End) -> Iterator[Point]:
        """Lower points by decades off the start, when constants have no effect or left for the limit."""
        parameters = self.objective.parameters
        movable = parameters.constants & parameters.positive
        standing = self.standing(end.point, end.point.sigmas)
        suspects = movable & ((standing.effects < WEAK) | self._at_limit(standing))
        if not suspects.any():
            return
        tries = [(end.point.theta, suspects, end.point)]
        if self._trouble(standing):
            tries += [(start.theta, suspects, start), (start.theta, movable, start)]
        tried: list[Floats] = []
        for others, which, reference in tries:
            found = lowest_decade(others, which, parameters, self._look_at)
            if found is None or found.cost >= reference.cost - LOOSE:
                continue
            if not any(np.array_equal(found.theta, theta) for theta in tried):
                tried.append(found.theta)
                yield found

    def _look_at(self, theta: Floats) -> Point | None:
        evaluation = self.model.evaluate(theta)
        return None if evaluation.failed is not None else self.meet(evaluation)

    def _judged(self, end: _End) -> _End:
        """No end is a minimum where no constant acts or where one still runs."""
        if end.converged:
            trouble = self._trouble(self.standing(end.point, end.point.sigmas))
            return _End(end.point, False, trouble) if trouble else end
        return end

    def _trouble(self, standing: Standing) -> str:
        parameters = self.objective.parameters
        at_limit = self._at_limit(standing)
        if at_limit.any():
            names = ", ".join(parameters.parameters[i].name for i in np.flatnonzero(at_limit))
            return (
                f"{names} went to the limit of the search, {FARTHEST:.0e}-fold from the start: start nearer to "
                "the truth, give a bound, or leave out the step"
            )
        constants = parameters.constants
        acts = (standing.effects >= WEAK) | standing.held
        free_of_priors = constants & np.isinf(self.objective.prior_sds)
        if free_of_priors.any() and not acts[constants].any():
            return (
                "no fitted constant has an effect on any point where the fit ended: start nearer to the truth, "
                "or from several starts"
            )
        return ""

    def _at_limit(self, standing: Standing) -> Flags:
        """Parameters that are pushed against a limit which nobody gave, shape (p,)."""
        given_lower, given_upper = self.objective.parameters.bounded
        theta = standing.point.theta
        given = (given_lower & (theta <= self.lower)) | (given_upper & (theta >= self.upper))
        return standing.held & ~given

    def meet(self, evaluation: Evaluation) -> Point:
        """The point of an evaluation that did not fail, remembered when it is the best so far."""
        point = self.objective.point(evaluation)
        if self.best is None or point.cost < self.best.cost:
            self.best = point
        return point

    def _minimise(self, current: Point, sigmas: Floats, last: int) -> tuple[Point, bool, str]:
        ending = HARDLY
        searches = 0
        for _ in range(4 * MOST_SEARCHES + 2 * len(self.scale)):  # parameters may be set on bounds one by one
            standing = self.standing(current, sigmas)
            if standing.crossing.any():
                moved = self._onto_bounds(standing, standing.crossing)
                if moved is None:
                    return current, False, "the model fails at a bound that the fit is pushed against"
                current = moved
                self.accepted(current)
                continue
            if standing.decrease < LOOSE or searches == MOST_SEARCHES or self.iterations >= last:
                break
            current, ending = Search(self, standing, last).run()
            current, reached = self._after(current, sigmas)
            searches += not reached  # a fresh trust region helps where the last one shrank away
        standing = self.standing(current, sigmas)
        if standing.decrease >= LOOSE:
            what = f"{ending}, though a full step should lower -2 ln L by {standing.decrease:.3g}"
            return current, False, what
        current, remaining = self._polish(current, sigmas, standing.decrease)
        return current, True, f"a full step would lower -2 ln L by {remaining:.1e} only"

    def _after(self, current: Point, sigmas: Floats) -> tuple[Point, bool]:
        """Where to go on after a search, and whether it led to a minimum or a bound."""
        standing = self.standing(current, sigmas)
        if standing.decrease < LOOSE or standing.crossing.any():
            return current, True
        if standing.beyond.any():  # the solver may creep towards a bound without getting near
            moved = self._onto_bounds(standing, standing.beyond)
            if moved is not None and self.sum_of_squares(moved, sigmas) < self.sum_of_squares(
                current, sigmas
            ):
                self.accepted(moved)
                return moved, True
        return current, False

    def _onto_bounds(self, standing: Standing, which: Flags) -> Point | None:
        """The point with these parameters exactly on the bounds that a full step would cross."""
        theta = standing.point.theta
        there = np.where(standing.found.step > 0, self.upper, self.lower)
        return self._look_at(np.where(which, there, theta))

    def _polish(self, current: Point, sigmas: Floats, decrease: float) -> tuple[Point, float]:
        """Last full steps, judged by the fall still to come, since the fall itself drowns in integration noise."""
        for _ in range(MOST_POLISHING_STEPS):
            if decrease < self._negligible:
                break
            theta = current.theta + self.standing(current, sigmas).found.step
            if np.any(theta < self.lower) or np.any(theta > self.upper):
                break
            point = self._look_at(theta)
            if point is None:
                break
            left = self.standing(point, sigmas).decrease
            if left >= decrease:
                break
            current, decrease = point, left
            self.accepted(current)
        return current, decrease

    def standing(self, point: Point, sigmas: Floats) -> Standing:
        """How a point stands at these sigmas; the last one is remembered."""
        last = self._standing
        if last is not None and last.point is point and np.array_equal(last.sigmas, sigmas):
            return last
        self._standing = standing_of(self.objective, point, sigmas, self.model.look_up)
        return self._standing

    def sum_of_squares(self, point: Point, sigmas: Floats) -> float:
        """Of the standardised residuals and the pulls, at these sigmas."""
        residuals = point.residuals / self.objective.data.sigma_of_points(sigmas)
        pulls = self.objective.prior_residuals(point.theta)
        return float(residuals @ residuals + pulls @ pulls)

    def accepted(self, point: Point) -> None:
        """Count an iteration and tell of it."""
        self.iterations += 1
        if self._on_progress is not None:
            self._on_progress(self.iterations, point.cost)


def _failure(evaluation: Evaluation) -> str:
    return f"{evaluation.failed}: {evaluation.reason}" if evaluation.failed else evaluation.reason
