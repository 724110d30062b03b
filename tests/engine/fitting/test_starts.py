"""Start points around the given one, and the minima they lead to."""

import math
from itertools import islice

import numpy as np

from kinetics_db.engine import parse_mechanism
from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Nuisance
from kinetics_db.engine.fitting.starts import EndPoint, distinct_minima, start_points

NETWORK = parse_mechanism("A --k_1--> B\nB --k_2--> C")
RUN = Experiment("r", (Charge("A", 1.0, ("w",)),), np.array([1.0]), ("A",), np.array([[0.5]]))
PARAMETERS = ParameterMap(
    NETWORK, [RUN], [Constant("k_1", 0.1), Constant("k_2", 1.0, upper=2.0)], [], [Nuisance("w", "r", 0.1)]
)


def points(starts, seed=3):
    return list(start_points(PARAMETERS, starts=starts, spread=10.0, seed=seed))


def test_the_first_start_is_the_given_one_and_the_others_lie_within_the_spread_and_bounds():
    found = np.array(points(50))
    assert found.shape == (50, 3)
    np.testing.assert_allclose(found[0], [math.log(0.1), 0.0, 0.0])
    assert np.all(np.abs(found[:, 0] - math.log(0.1)) <= math.log(10.0))
    assert found[:, 1].max() <= math.log(2.0) and found[:, 1].min() >= -math.log(10.0)
    np.testing.assert_array_equal(found[:, 2], 0.0)  # the nuisance stays at its prior's mean
    assert len({tuple(row) for row in found}) == 50


def test_fewer_starts_are_the_first_of_more_starts_and_another_seed_gives_others():
    np.testing.assert_array_equal(points(5), points(33)[:5])
    assert not np.array_equal(points(5), points(5, seed=4))
    assert len(points(1)) == 1


def test_sixteen_further_starts_fall_into_sixteen_equal_parts_of_the_spread():
    """A Sobol' sequence of 2^m points has one in each of 2^m equal intervals of every coordinate."""
    share = (np.array(points(17))[1:, 0] - math.log(0.1)) / math.log(10.0) / 2 + 0.5
    assert sorted(np.floor(16 * share).astype(int).tolist()) == list(range(16))


def test_a_thousand_million_starts_are_not_made_before_they_are_asked_for():
    found = list(islice(start_points(PARAMETERS, starts=10**9, spread=10.0, seed=3), 5))
    np.testing.assert_array_equal(found, points(5))


def ends(*entries):
    return [EndPoint(cost, np.array(theta)) for cost, theta in entries]


def test_minima_of_like_cost_and_place_are_one_and_the_others_stand_apart():
    found = distinct_minima(
        ends(
            (7.0, [3.0, 0.0, 0.0]),
            (1.001, [0.001, 0.0, 0.0]),
            (1.0, [0.0, 0.0, 0.0]),
            (1.002, [1.0, 0.0, 0.0]),
            (7.001, [3.0, 0.0, 0.0]),
            (7.5, [0.0, 0.0, 0.0]),
        ),
        PARAMETERS,
    )
    assert [(m.cost, m.found) for m in found] == [(1.0, 2), (1.002, 1), (7.0, 2), (7.5, 1)]
    assert found[0].values == (1.0, 1.0, 1.0)  # the nuisance is a factor on its logarithm


def test_ten_thousand_end_points_in_a_flat_valley_are_told_of_one_by_one():
    told = []
    valley = ends(*((1.0, [0.03 * i, 0.0, 0.0]) for i in range(10_000)))
    assert len(distinct_minima(valley[:100], PARAMETERS)) == 100
    assert len(distinct_minima(valley, PARAMETERS, lambda: told.append(1))) == 10_000
    assert len(told) == 10_000
