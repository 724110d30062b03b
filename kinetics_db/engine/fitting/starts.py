"""Further start points for a fit, and the distinct minima that they lead to."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import islice

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from kinetics_db.engine.fitting.outcome import Minimum
from kinetics_db.engine.fitting.parameters import ParameterMap

Floats = NDArray[np.float64]
SAME_COST = 1e-2  # of -2 ln L
SAME_PLACE = 1e-2  # of a parameter's scale


@dataclass(frozen=True, eq=False)
class EndPoint:
    """Where one start led: the cost and the point on the fitted scale, shape (p,)."""

    cost: float
    theta: Floats


def start_points(parameters: ParameterMap, *, starts: int, spread: float, seed: int) -> Iterator[Floats]:
    """The given start, then scrambled Sobol points around it, on the fitted scale, made as they are asked for.

    Positive constants and start concentrations are spread evenly in their logarithm, `spread`-fold to each
    side; others by their own size. Nuisance parameters stay at their prior's mean. Sobol' (1967); Owen's
    scrambling (1998); the same seed gives the same points.
    """
    first = parameters.start
    yield first
    lower, upper = parameters.bounds
    spread_over = [i for i, p in enumerate(parameters.parameters) if p.kind != "nuisance"]
    if starts == 1 or not spread_over:
        return
    reach = np.array(
        [
            math.log(spread) if p.positive else spread * max(abs(p.start), 1e-3)
            for p in (parameters.parameters[i] for i in spread_over)
        ]
    )
    for row in islice(_sobol(len(spread_over), seed), starts - 1):
        theta = first.copy()
        theta[spread_over] += (2.0 * row - 1.0) * reach
        yield np.clip(theta, lower, upper)


def _sobol(dimension: int, seed: int) -> Iterator[Floats]:
    sampler = qmc.Sobol(dimension, scramble=True, rng=np.random.default_rng(seed))
    yield from sampler.random_base2(0)
    while True:  # as many again as there are: the sequence is balanced at powers of two only
        yield from sampler.random_base2(sampler.num_generated.bit_length() - 1)


def distinct_minima(
    ends: Sequence[EndPoint], parameters: ParameterMap, on_work: Callable[[], None] | None = None
) -> tuple[Minimum, ...]:
    """End points that differ in cost or place, best first, with how many starts led to each.

    ``on_work`` is called for each end point.
    """
    scale = np.array([p.scale for p in parameters.parameters])
    places = np.empty((len(ends), len(scale)))
    costs: list[float] = []
    found: list[int] = []
    nearest = 0  # the first minimum whose cost may still count as the same, since costs only rise
    for end in sorted(ends, key=lambda e: e.cost):
        if on_work is not None:
            on_work()
        while nearest < len(costs) and end.cost - costs[nearest] >= SAME_COST:
            nearest += 1
        near = np.abs(places[nearest : len(costs)] - end.theta) < SAME_PLACE * scale
        same = np.flatnonzero(near.all(axis=1))
        if same.size:
            found[nearest + int(same[0])] += 1
        else:
            places[len(costs)] = end.theta
            costs.append(end.cost)
            found.append(1)
    return tuple(
        Minimum(cost, times, tuple(parameters.values(theta).tolist()))
        for cost, times, theta in zip(costs, found, places, strict=False)
    )
