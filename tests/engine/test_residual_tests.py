"""Tests on residuals against published values and against counting by hand."""

import math
import time
from fractions import Fraction
from itertools import pairwise, permutations

import numpy as np
import pytest

from kinetics_db.engine.residual_tests import durbin_watson, holm, probability_of_runs, runs_test


@pytest.mark.parametrize(
    ("positive", "negative", "runs", "tabulated"),
    # Swed & Eisenhart 1943, table I, quoted from memory and checked by counting
    [
        (2, 2, 2, 0.333),
        (3, 4, 2, 0.057),
        (5, 5, 3, 0.040),
        (5, 6, 3, 0.024),
        (10, 10, 6, 0.019),
        (8, 9, 5, 0.020),
    ],
)
def test_few_runs_are_as_rare_as_tabulated(positive, negative, runs, tabulated):
    assert probability_of_runs(runs, positive, negative) == pytest.approx(tabulated, abs=6e-4)


def test_the_distribution_of_runs_agrees_with_counting_every_order():
    signs = [1] * 4 + [-1] * 3
    orders = set(permutations(signs))
    counts = [1 + sum(a != b for a, b in pairwise(o)) for o in orders]
    for r in range(1, 8):
        expected = sum(c <= r for c in counts) / len(orders)
        assert probability_of_runs(r, 4, 3) == pytest.approx(expected, abs=1e-12)


def counted(runs, positive, negative):
    """The same sum of products of binomials (Swed & Eisenhart 1943) in exact rational numbers."""
    ways = 0
    for r in range(2, runs + 1):
        k = r // 2
        a, b = math.comb(positive - 1, k - 1), math.comb(negative - 1, k - 1)
        if r % 2 == 0:
            ways += 2 * a * b
        else:
            ways += math.comb(positive - 1, k) * b + a * math.comb(negative - 1, k)
    return float(Fraction(ways, math.comb(positive + negative, positive)))


def test_every_probability_up_to_sixteen_of_each_sign_is_exact_to_the_last_digits():
    for positive in range(1, 17):
        for negative in range(1, 17):
            for runs in range(positive + negative + 2):
                expected = counted(runs, positive, negative)
                assert probability_of_runs(runs, positive, negative) == pytest.approx(expected, rel=2e-15)


@pytest.mark.parametrize(
    ("positive", "negative", "runs"),
    [(800, 700, 500), (800, 700, 746), (800, 700, 801), (700, 800, 600), (2000, 3, 5), (900, 600, 100)],
)
def test_probabilities_of_many_points_agree_with_exact_arithmetic_far_into_the_tail(positive, negative, runs):
    expected = counted(runs, positive, negative)
    assert 0.0 < expected < 1.0
    assert probability_of_runs(runs, positive, negative) == pytest.approx(expected, rel=1e-13)


@pytest.mark.parametrize(("positive", "negative"), [(50_000, 50_000), (70_000, 30_000)])
def test_a_hundred_thousand_points_meet_the_normal_limit_at_once(positive, negative):
    """Mean and variance of the number of runs: Wald & Wolfowitz, Ann. Math. Statist. 11 (1940) 147."""
    n, product = positive + negative, 2 * positive * negative
    mean = product / n + 1
    sd = math.sqrt(product * (product - n) / (n**2 * (n - 1)))
    for deviation in (-3.0, -1.0, 0.0, 2.0):
        runs = math.floor(mean + deviation * sd)
        begun = time.thread_time()
        found = probability_of_runs(runs, positive, negative)
        assert time.thread_time() - begun < 0.1  # of the processor, about 5 ms
        z = (runs + 0.5 - mean) / sd
        assert found == pytest.approx(0.5 * math.erfc(-z / math.sqrt(2.0)), rel=0.01)


def test_two_runs_of_very_many_points_are_too_rare_for_any_number():
    assert probability_of_runs(2, 50_000, 50_000) == 0.0
    assert probability_of_runs(100_000, 50_000, 50_000) == pytest.approx(1.0, rel=1e-14)


def test_fewer_than_two_runs_cannot_be_when_both_signs_are_there():
    assert probability_of_runs(1, 3, 4) == 0.0
    assert probability_of_runs(1, 3, 0) == 1.0


def test_residuals_of_one_sign_are_as_rare_as_equal_coin_tosses():
    assert runs_test([0.1] * 10) == pytest.approx(2.0**-9)
    assert runs_test([-3.0, -2.0]) == pytest.approx(0.5)


def test_zeros_are_left_out_of_the_runs():
    assert runs_test([1.0, 0.0, -1.0, 0.0, 1.0]) == runs_test([1.0, -1.0, 1.0])
    assert runs_test([0.0, 0.0]) is None


def test_alternating_residuals_are_not_too_few_runs():
    assert runs_test([1.0, -1.0] * 6) == pytest.approx(1.0)


def test_durbin_watson_is_near_four_for_alternating_and_small_for_drifting_residuals():
    """Sum of squared differences over sum of squares, worked by hand."""
    assert durbin_watson([1.0, -1.0, 1.0, -1.0]) == pytest.approx(12.0 / 4.0)
    assert durbin_watson([1.0, 2.0, 3.0]) == pytest.approx(2.0 / 14.0)
    assert durbin_watson([1.0]) is None
    assert durbin_watson(np.zeros(5)) is None


def test_holm_multiplies_the_smallest_p_by_the_number_of_tests_and_keeps_the_order():
    """Steps of Holm (1979), worked by hand."""
    assert holm([0.01, None, 0.04, 0.03, 0.005]) == pytest.approx([0.03, None, 0.06, 0.06, 0.02])
    assert holm([0.9, 0.8]) == pytest.approx([1.0, 1.0])
    assert holm([]) == []
