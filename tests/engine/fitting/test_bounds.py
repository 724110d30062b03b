"""At a bound a fit stands exactly on it, and what is left free is at its minimum."""

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Prior

DECAY = parse_mechanism("A --k--> B")
CHAIN = parse_mechanism("A --k_1--> I\nI --k_2--> B")
TIMES = np.linspace(0.0, 200.0, 20)


def decay(k=0.01, sigma=0.01, seed=3):
    values = np.stack([np.exp(-k * TIMES), -np.expm1(-k * TIMES)], axis=1)
    values = values + sigma * np.random.default_rng(seed).normal(size=values.shape)
    return Experiment("r", (Charge("A", 1.0),), TIMES, ("A", "B"), values, np.full(values.shape, sigma))


def chain(k_1=0.01, k_2=0.02, sigma=1e-3):
    a = np.exp(-k_1 * TIMES)
    i = k_1 / (k_2 - k_1) * (a - np.exp(-k_2 * TIMES))
    values = np.stack([a, i], axis=1) + sigma * np.random.default_rng(5).normal(size=(len(TIMES), 2))
    return Experiment("r", (Charge("A", 1.0),), TIMES, ("A", "I"), values, np.full((len(TIMES), 2), sigma))


@pytest.mark.parametrize("sigma", [0.01, 0.001])
@pytest.mark.parametrize("bound", [0.005, 0.009, 0.0095])
@pytest.mark.parametrize("start", [0.5, 0.99, 0.9995, 1.0])
def test_a_constant_is_set_exactly_on_the_bound_that_it_is_pushed_against(sigma, bound, start):
    experiment = decay(sigma=sigma)
    fit = fit_globally(DECAY, [experiment], [Constant("k", start * bound, upper=bound)])
    held = fit_globally(DECAY, [experiment], [Constant("k", bound, "held")])
    assert fit.status == "converged", fit.message
    assert fit.parameter("k").at_bound
    np.testing.assert_allclose(fit.parameter("k").value, bound, rtol=1e-14)
    np.testing.assert_allclose(fit.cost, held.cost, atol=1e-6 * abs(held.cost))
    assert fit.parameter("k").why_not == "k is pushed against its bound"


@pytest.mark.parametrize("bounded", ["k_1", "k_2"])
@pytest.mark.parametrize("side", ["lower", "upper"])
def test_what_is_left_free_is_at_the_minimum_that_it_has_with_the_other_one_held_there(bounded, side):
    truth = {"k_1": 0.01, "k_2": 0.02}
    bound = truth[bounded] * (1.3 if side == "lower" else 0.7)
    inside = bound * (2.0 if side == "lower" else 0.5)
    free = "k_2" if bounded == "k_1" else "k_1"
    experiment = chain()
    fit = fit_globally(
        CHAIN, [experiment], [Constant(bounded, inside, **{side: bound}), Constant(free, 0.05)]
    )
    held = fit_globally(CHAIN, [experiment], [Constant(bounded, bound, "held"), Constant(free, 0.05)])
    assert fit.status == "converged", fit.message
    assert fit.parameter(bounded).at_bound and not fit.parameter(free).at_bound
    np.testing.assert_allclose(fit.parameter(free).value, held.parameter(free).value, rtol=1e-6)
    np.testing.assert_allclose(
        fit.parameter(free).standard_error, held.parameter(free).standard_error, rtol=1e-4
    )
    assert fit.cost <= held.cost + 1e-4


def test_two_constants_may_stand_on_their_bounds_at_once():
    constants = [Constant("k_1", 0.001, upper=0.005), Constant("k_2", 0.1, lower=0.04)]
    fit = fit_globally(CHAIN, [chain()], constants)
    assert fit.status == "converged", fit.message
    assert [p.at_bound for p in fit.parameters] == [True, True]
    np.testing.assert_allclose([p.value for p in fit.parameters], [0.005, 0.04], rtol=1e-14)


@pytest.mark.parametrize("away", [0.0, 1e-9, 1e-5])
def test_a_start_on_a_bound_that_leads_inwards_is_left(away):
    fit = fit_globally(DECAY, [decay()], [Constant("k", 0.005 * (1 + away), lower=0.005)])
    free = fit_globally(DECAY, [decay()], [Constant("k", 0.005)])
    assert fit.status == "converged", fit.message
    assert not fit.parameter("k").at_bound
    np.testing.assert_allclose(fit.parameter("k").value, free.parameter("k").value, rtol=1e-6)


def test_an_optimum_just_inside_its_bound_is_not_moved_onto_it():
    best = fit_globally(DECAY, [decay()], [Constant("k", 0.005)]).parameter("k")
    bound = best.value * (1 + 1e-4)
    fit = fit_globally(DECAY, [decay()], [Constant("k", 0.005, upper=bound)])
    assert fit.status == "converged", fit.message
    assert not fit.parameter("k").at_bound
    np.testing.assert_allclose(fit.parameter("k").value, best.value, rtol=1e-6)
    np.testing.assert_allclose(fit.parameter("k").standard_error, best.standard_error, rtol=1e-3)


def test_a_constant_on_a_linear_scale_stands_on_its_bound_of_zero():
    network = parse_mechanism("A --{ k*[A]*(1 + c*[B]) }--> B")
    values = np.exp(-0.01 * TIMES)[:, None] + 1e-3 * np.random.default_rng(8).normal(size=(len(TIMES), 1))
    # slower than first order towards the end: c would be negative
    values[-5:] += 0.05
    experiment = Experiment("r", (Charge("A", 1.0),), TIMES, ("A",), values, np.full((len(TIMES), 1), 1e-3))
    constants = [Constant("k", 0.01), Constant("c", 0.5, lower=0.0, positive=False)]
    fit = fit_globally(network, [experiment], constants)
    assert fit.status == "converged", fit.message
    assert fit.parameter("c").value == 0.0
    assert fit.parameter("c").at_bound


@pytest.mark.parametrize("sd", [10.0, 100.0, 1000.0])
@pytest.mark.parametrize("bounds", [{}, {"lower": 0.003, "upper": 0.02}])
def test_a_weak_prior_does_not_freeze_a_constant_where_it_starts(sd, bounds):
    fit = fit_globally(DECAY, [decay()], [Constant("k", 0.0051, prior=Prior(0.01, sd), **bounds)])
    free = fit_globally(DECAY, [decay()], [Constant("k", 0.0051)])
    assert fit.status == "converged", fit.message
    assert not fit.parameter("k").at_bound
    np.testing.assert_allclose(fit.parameter("k").value, free.parameter("k").value, rtol=1e-5)
    np.testing.assert_allclose(
        fit.parameter("k").standard_error, free.parameter("k").standard_error, rtol=1e-4
    )


def test_a_weak_prior_on_a_linear_scale_does_not_freeze_a_constant_either():
    prior = Prior(0.01, 10.0)
    constant = Constant("k", 0.001, lower=0.0, upper=1.0, prior=prior, positive=False)
    fit = fit_globally(DECAY, [decay()], [constant])
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.parameter("k").value, 0.01, rtol=0.03)
