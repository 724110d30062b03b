"""Covariance, leverage and what is not determined, on linear problems with known answers."""

import numpy as np
import pytest

from kinetics_db.engine.fitting.uncertainty import curvature, pushed_against_bounds

NO_PRIOR = np.full(2, np.inf)
ZERO = np.zeros(2)


def straight_line():
    x = np.array([0.0, 1.0, 2.0, 3.0])
    return np.stack([np.ones(4), x], axis=1)


def test_covariance_of_a_straight_line_is_the_textbook_one():
    """Intercept and slope at x = 0..3 with sigma 1: variances 0.7 and 0.2, covariance -0.3."""
    found = curvature(straight_line(), np.zeros(4), NO_PRIOR, ZERO)
    np.testing.assert_allclose(found.covariance, [[0.7, -0.3], [-0.3, 0.2]], rtol=1e-12)
    np.testing.assert_allclose(found.leverage, [0.7, 0.3, 0.3, 0.7], rtol=1e-12)
    assert found.determined.all()


def test_the_step_of_a_linear_problem_leads_to_its_minimum():
    jacobian, residuals = straight_line(), np.array([1.0, 2.0, 2.0, 5.0])
    found = curvature(jacobian, residuals, NO_PRIOR, ZERO)
    at_end = residuals + jacobian @ found.step
    np.testing.assert_allclose(jacobian.T @ at_end, 0.0, atol=1e-12)
    np.testing.assert_allclose(found.decrease, residuals @ residuals - at_end @ at_end)


def test_a_prior_adds_its_precision():
    found = curvature(straight_line(), np.zeros(4), np.array([0.5, np.inf]), ZERO)
    expected = np.linalg.inv(straight_line().T @ straight_line() + np.diag([4.0, 0.0]))
    np.testing.assert_allclose(found.covariance, expected, rtol=1e-12)
    assert found.leverage.sum() < 2.0


def test_two_columns_in_one_direction_are_not_determined_and_the_third_is():
    column = np.array([1.0, 2.0, 3.0, 4.0])
    jacobian = np.stack([column, 1e6 * column, np.array([1.0, 0.0, 0.0, -1.0])], axis=1)
    found = curvature(jacobian, np.zeros(4), np.full(3, np.inf), np.zeros(3))
    assert found.determined.tolist() == [False, False, True]
    assert np.isnan(found.covariance[:2]).all()
    assert np.isfinite(found.covariance[2, 2])
    assert found.leverage.sum() == pytest.approx(2.0)


def test_a_column_of_zeros_is_inert():
    jacobian = np.stack([np.ones(3), np.zeros(3)], axis=1)
    found = curvature(jacobian, np.zeros(3), NO_PRIOR, ZERO)
    assert found.inert.tolist() == [False, True]
    assert found.determined.tolist() == [True, False]


def test_units_do_not_decide_what_is_determined():
    jacobian = straight_line() * np.array([1e-9, 1e9])
    found = curvature(jacobian, np.zeros(4), NO_PRIOR, ZERO, scales=np.array([1e9, 1e-9]))
    assert found.determined.all()
    np.testing.assert_allclose(found.covariance[0, 0], 0.7e18, rtol=1e-9)


def test_only_what_is_pushed_outwards_counts_as_at_a_bound():
    theta = np.array([0.0, 0.0, 1.0, 1.0, 0.5])
    gradient = np.array([1.0, -1.0, -1.0, 1.0, 1.0])
    pushed = pushed_against_bounds(theta, np.zeros(5), np.ones(5), gradient)
    assert pushed.tolist() == [True, False, True, False, False]


def test_what_is_near_a_bound_counts_only_when_asked():
    theta, gradient = np.array([1e-4, 0.9999, 0.5]), np.array([1.0, -1.0, 1.0])
    assert not pushed_against_bounds(theta, np.zeros(3), np.ones(3), gradient).any()
    near = pushed_against_bounds(theta, np.zeros(3), np.ones(3), gradient, 1e-3)
    assert near.tolist() == [True, True, False]
