"""Where else to begin when a fit ended where its constants have no effect: the same start, by decades off."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.objective import Point
from kinetics_db.engine.fitting.parameters import FARTHEST, ParameterMap

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
DECADE = math.log(10.0)
MOST_DECADES = round(math.log10(FARTHEST))


def lowest_decade(
    others: Floats, which: Flags, parameters: ParameterMap, look_at: Callable[[Floats], Point | None]
) -> Point | None:
    """The best of the points where some constants are a common power of ten from their starts.

    Parameters
    ----------
    others : ndarray, shape (p,), where the other parameters stay, on the fitted scale
    which : ndarray of bool, shape (p,), the positive constants that are moved together
    parameters : their starts and bounds
    look_at : evaluates a point, None when the model fails there; farther in that direction is then left out

    Returns
    -------
    Point or None
        None when the model failed everywhere.
    """
    best: Point | None = None
    for direction in (1, -1):
        for theta in _decades(others, which, parameters, direction):
            point = look_at(theta)
            if point is None:
                break
            if best is None or point.cost < best.cost:
                best = point
    return best


def _decades(others: Floats, which: Flags, parameters: ParameterMap, direction: int) -> Iterator[Floats]:
    lower, upper = parameters.bounds
    start = parameters.start
    before: Floats | None = None
    for decade in range(0 if direction > 0 else 1, MOST_DECADES + 1):
        theta = others.copy()
        theta[which] = (start + direction * decade * DECADE)[which]
        theta = np.clip(theta, lower, upper)
        if before is not None and np.array_equal(theta, before):
            return  # all are at their bounds
        before = theta
        yield theta
