"""Further start points for a fit, and the distinct minima that they lead to."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from kinetics_db.engine.fitting.descent import Descent
from kinetics_db.engine.fitting.outcome import Minimum
from kinetics_db.engine.fitting.parameters import ParameterMap

Floats = NDArray[np.float64]
SAME_COST = 1e-2  # of -2 ln L
SAME_PLACE = 1e-2  # of a parameter's scale


def start_points(parameters: ParameterMap, *, starts: int, spread: float, seed: int) -> list[Floats]:
    """The given start, then scrambled Sobol points around it, on the fitted scale.

    Positive constants and start concentrations are spread evenly in their logarithm, `spread`-fold to each
    side; others by their own size. Nuisance parameters stay at their prior's mean. Sobol' (1967); Owen's
    scrambling (1998); the same seed gives the same points.
    """
    first = parameters.start
    if starts == 1:
        return [first]
    lower, upper = parameters.bounds
    spread_over = [i for i, p in enumerate(parameters.parameters) if p.kind != "nuisance"]
    points = [first]
    if not spread_over:
        return points
    further = starts - 1
    sampler = qmc.Sobol(len(spread_over), scramble=True, rng=np.random.default_rng(seed))
    unit = sampler.random_base2(max(math.ceil(math.log2(further)), 0))[:further]
    reach = np.array(
        [
            math.log(spread) if p.positive else spread * max(abs(p.start), 1e-3)
            for p in (parameters.parameters[i] for i in spread_over)
        ]
    )
    for row in unit:
        theta = first.copy()
        theta[spread_over] += (2.0 * row - 1.0) * reach
        points.append(np.clip(theta, lower, upper))
    return points


def distinct_minima(descents: Sequence[Descent], parameters: ParameterMap) -> tuple[Minimum, ...]:
    """End points that differ in cost or place, best first, with how many starts led to each."""
    scale = np.array([p.scale for p in parameters.parameters])
    ended = sorted(
        (d.point for d in descents if d.point is not None and d.status == "converged"), key=lambda p: p.cost
    )
    groups: list[tuple[float, Floats, int]] = []
    for point in ended:
        for i, (cost, theta, found) in enumerate(groups):
            near = bool(np.all(np.abs(point.theta - theta) < SAME_PLACE * scale))
            if abs(point.cost - cost) < SAME_COST and near:
                groups[i] = (cost, theta, found + 1)
                break
        else:
            groups.append((point.cost, point.theta, 1))
    return tuple(
        Minimum(cost, found, tuple(parameters.values(theta).tolist())) for cost, theta, found in groups
    )
