"""Fits that start where their constants have no effect find their way, or say that they did not."""

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Prior, Settings

DECAY = parse_mechanism("A --k--> B")
CHAIN = parse_mechanism("A --k_1--> I\nI --k_2--> B")
TIMES = np.linspace(5.0, 300.0, 25)
K, K_1, K_2 = 0.01, 0.01, 0.02


def decay(times=TIMES, sigma=0.01, **more):
    values = np.stack([np.exp(-K * times), -np.expm1(-K * times)], axis=1)
    values = values + sigma * np.random.default_rng(3).normal(size=values.shape)
    given = {"charges": (Charge("A", 1.0),), "sigma": np.full(values.shape, sigma), **more}
    return Experiment("r", times=times, observed=("A", "B"), values=values, **given)


def chain(sigma=0.005):
    a = np.exp(-K_1 * TIMES)
    i = K_1 / (K_2 - K_1) * (a - np.exp(-K_2 * TIMES))
    values = np.stack([a, i, 1 - a - i], axis=1)
    values = values + sigma * np.random.default_rng(4).normal(size=values.shape)
    return Experiment("r", (Charge("A", 1.0),), TIMES, ("A", "I", "B"), values, np.full(values.shape, sigma))


@pytest.mark.parametrize("factor", [1e4, 1e8, 1e-4, 1e-8])
def test_a_single_constant_is_found_from_far_off(factor):
    fit = fit_globally(DECAY, [decay()], [Constant("k", K * factor)])
    near = fit_globally(DECAY, [decay()], [Constant("k", K)])
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.parameter("k").value, near.parameter("k").value, rtol=1e-5)


@pytest.mark.parametrize("factors", [(1e3, 1e3), (1e4, 1.0), (1.0, 1e4), (1e4, 1e4), (1e-4, 1e-4)])
def test_two_consecutive_constants_are_found_from_far_off(factors):
    starts = [Constant("k_1", K_1 * factors[0]), Constant("k_2", K_2 * factors[1])]
    fit = fit_globally(CHAIN, [chain()], starts)
    near = fit_globally(CHAIN, [chain()], [Constant("k_1", K_1), Constant("k_2", K_2)])
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.cost, near.cost, atol=1e-4)
    for name, truth in (("k_1", K_1), ("k_2", K_2)):
        np.testing.assert_allclose(fit.parameter(name).value, truth, rtol=0.05)


def test_the_way_off_a_plateau_is_the_same_every_time():
    starts = [Constant("k_1", 1e3 * K_1), Constant("k_2", 1e3 * K_2)]
    assert fit_globally(CHAIN, [chain()], starts) == fit_globally(CHAIN, [chain()], starts)


def test_where_no_constant_has_an_effect_the_fit_has_not_converged_and_says_why():
    """All points lie before the run begins, where nothing moves whatever the constant."""
    fit = fit_globally(DECAY, [decay(start_time=1e4)], [Constant("k", 0.1)])
    assert fit.status == "not converged"
    assert "no fitted constant has an effect" in fit.message
    assert "no effect" in fit.parameter("k").why_not


def test_a_plateau_that_bounds_enclose_is_not_convergence_either():
    fit = fit_globally(DECAY, [decay(times=np.linspace(50.0, 300.0, 9))], [Constant("k", 1e4, lower=1e3)])
    assert fit.status == "not converged"
    assert "no fitted constant has an effect" in fit.message


def test_a_constant_that_its_prior_holds_on_a_plateau_has_converged():
    fit = fit_globally(DECAY, [decay()], [Constant("k", 100.0, prior=Prior(100.0, 1e-3))])
    assert fit.status == "converged", fit.message
    assert fit.parameter("k").set_by_prior


def test_a_tight_prior_does_not_make_a_constant_look_without_effect():
    fit = fit_globally(DECAY, [decay()], [Constant("k", K, prior=Prior(K, 1e-7))])
    assert fit.status == "converged", fit.message


def test_a_constant_that_vanishes_leaves_the_others_converged():
    """The second step does not happen: its constant goes down until it no longer matters."""
    network = parse_mechanism("A --k--> B\nB --k_2--> C")
    times = np.linspace(0.0, 200.0, 20)
    values = np.stack([np.exp(-K * times), 1.002 - np.exp(-K * times)], axis=1)
    experiment = Experiment("r", (Charge("A", 1.0),), times, ("A", "B"), values, np.full(values.shape, 0.01))
    fit = fit_globally(network, [experiment], [Constant("k", 0.02), Constant("k_2", 1e-3)])
    assert fit.status == "converged", fit.message
    assert fit.parameter("k").determined
    vanished = fit.parameter("k_2")
    assert not vanished.determined and not vanished.at_bound
    assert vanished.value < 1e-6


def test_a_constant_at_the_limit_of_the_search_is_not_said_to_be_at_a_bound():
    """The data ask for a rate that grows without end: more than a billionfold from its start."""
    network = parse_mechanism("nothing --k--> P")
    times = np.array([1.0, 2.0])
    experiment = Experiment("r", (), times, ("P",), 1e12 * times[:, None], np.full((2, 1), 1.0))
    fit = fit_globally(network, [experiment], [Constant("k", 1.0)])
    assert fit.status == "not converged"
    assert "k went to the limit of the search" in fit.message
    assert "the limit of the search" in fit.parameter("k").why_not
    assert "bound" not in fit.parameter("k").why_not
    assert not fit.parameter("k").at_bound


def test_a_stop_is_obeyed_while_other_decades_are_looked_at():
    asked = []

    def stop():
        asked.append(None)
        return len(asked) > 10

    fit = fit_globally(DECAY, [decay()], [Constant("k", 1e4)], should_stop=stop)
    assert fit.status == "stopped"
    assert len(asked) < 30


def test_the_other_starts_are_not_repeated_from_every_decade():
    """Sixteen starts on the plateau: only the first is moved by decades."""
    one = fit_globally(DECAY, [decay()], [Constant("k", 1e4)])
    many = fit_globally(DECAY, [decay()], [Constant("k", 1e4)], settings=Settings(starts=16))
    assert many.status == "converged", many.message
    assert many.evaluations < one.evaluations + 16 * 5
    assert len(many.minima) == 1
