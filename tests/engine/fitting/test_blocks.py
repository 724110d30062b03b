"""The curvature in blocks of rows against the whole one."""

import time

import numpy as np
import pytest

from kinetics_db.engine.fitting import blocks
from kinetics_db.engine.fitting.blocks import curvature_and_leverage
from kinetics_db.engine.fitting.uncertainty import curvature


def problem(v, p, seed=1):
    """Columns of very different size, two that act only together, one without effect, one with a prior."""
    rng = np.random.default_rng(seed)
    jacobian = rng.normal(size=(v, p)) * np.logspace(0, 4, p)
    jacobian[:, 2] = jacobian[:, 0]
    jacobian[:, 3] = 0.0
    sds = np.full(p, np.inf)
    sds[1] = 0.1
    pulls = np.zeros(p)
    pulls[1] = 2.0
    fixed = np.zeros(p, dtype=bool)
    fixed[4] = True
    return jacobian, rng.normal(size=v), sds, pulls, fixed, np.ones(p)


@pytest.mark.parametrize(("v", "p"), [(1, 6), (5, 8), (100, 6), (5000, 12), (2 * blocks.FEWEST_ROWS + 3, 6)])
def test_blocks_give_what_the_whole_gives(v, p):
    given = problem(v, p)
    whole = curvature(*given)
    found, leverage = curvature_and_leverage(*given)
    np.testing.assert_allclose(leverage, whole.leverage, rtol=1e-10, atol=1e-13)
    errors = np.sqrt(np.diag(whole.covariance))
    np.testing.assert_allclose(
        found.covariance, whole.covariance, rtol=1e-9, atol=1e-12 * np.nanmax(errors, initial=0.0) ** 2
    )
    np.testing.assert_allclose(found.step, whole.step, rtol=1e-8, atol=1e-12)
    np.testing.assert_allclose(found.decrease, whole.decrease, rtol=1e-10)
    np.testing.assert_array_equal(found.determined, whole.determined)
    np.testing.assert_array_equal(found.inert, whole.inert)


def test_the_leverages_add_up_to_the_parameters_that_the_data_determine():
    jacobian = np.random.default_rng(3).normal(size=(7000, 5))
    nothing = np.zeros(5)
    _, leverage = curvature_and_leverage(
        jacobian, np.zeros(7000), np.full(5, np.inf), nothing, nothing.astype(bool), np.ones(5)
    )
    np.testing.assert_allclose(leverage.sum(), 5.0, rtol=1e-12)


def test_nothing_free_has_no_leverage():
    found, leverage = curvature_and_leverage(
        np.zeros((3, 0)), np.ones(3), np.zeros(0), np.zeros(0), np.zeros(0, dtype=bool), np.zeros(0)
    )
    np.testing.assert_array_equal(leverage, np.zeros(3))
    assert found.covariance.shape == (0, 0)


def test_a_hundred_thousand_points_and_sixty_parameters_take_no_long_silence():
    told = [time.thread_time()]
    given = problem(100_000, 60)
    curvature_and_leverage(*given, on_work=lambda: told.append(time.thread_time()))
    assert len(told) > 2 * 100_000 // blocks.FEWEST_ROWS
    assert told[-1] - told[0] < 15.0  # of the processor, about 0.3 s; wide, as others may use the machine
    assert max(np.diff(told)) < 1.0
