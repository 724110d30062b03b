"""Tests on residuals against published values and against counting by hand."""

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
