"""What a global fit finds, and what it says when it cannot."""

import pickle
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism, simulate
from kinetics_db.engine.fitting.problem import (
    Charge,
    Constant,
    Experiment,
    Nuisance,
    Prior,
    Settings,
    StartConcentration,
)

NETWORK = parse_mechanism("A --k_1--> B\nB --k_2--> C")
TIMES = np.linspace(0.5, 12.0, 24)
ONE_SIGMA = Settings(error_model="one sigma")


def made(name, k1=0.5, k2=0.2, a=1.0, sigma=0.01, seed=1, observed=("A", "B", "C"), **more):
    """An experiment of A, B, C with normal noise; seed None for none."""
    curves = simulate(NETWORK, constants={"k_1": k1, "k_2": k2}, start={"A": a}, times=TIMES)
    values = np.stack([curves.of(o) for o in observed], axis=1)
    if seed is not None:
        values = values + sigma * np.random.default_rng(seed).normal(size=values.shape)
    given = {"charges": (Charge("A", 1.0),), "sigma": np.full(values.shape, sigma), **more}
    return Experiment(name=name, times=TIMES, observed=observed, values=values, **given)


def start(**scope):
    return [Constant("k_1", 0.1, **scope), Constant("k_2", 1.0)]


def test_the_truth_lies_in_the_intervals_of_a_well_determined_fit():
    fit = fit_globally(NETWORK, [made("r1", seed=3), made("r2", seed=4)], start())
    assert fit.status == "converged", fit.message
    for name, truth in (("k_1", 0.5), ("k_2", 0.2)):
        p = fit.parameter(name)
        assert p.lower < truth < p.upper
        assert p.determined and not p.at_bound
        assert p.scale == "logarithmic"
        np.testing.assert_allclose(np.sqrt(p.lower * p.upper), p.value, rtol=1e-9)
    assert fit.quantile_kind == "normal"
    np.testing.assert_allclose(fit.quantile, 1.959964, rtol=1e-6)
    np.testing.assert_allclose(
        fit.minus_two_log_likelihood,
        fit.weighted_residual_sum_of_squares + 2 * fit.n_points * np.log(0.01),
        rtol=1e-9,
    )
    assert fit.cost == fit.minus_two_log_likelihood + fit.minus_two_log_prior
    assert fit.minus_two_log_prior == 0.0


def test_the_jacobian_of_every_point_agrees_with_two_fits_at_neighbouring_values():
    """Derivatives of model/sigma against differences of closed-form curves, through factors and clock."""
    network = parse_mechanism("A --k--> B")
    times = np.array([1.0, 4.0, 9.0])

    def model(ln_k, ln_w, ln_s, shift):
        return 2.0 * np.exp(ln_w + ln_s) * np.exp(-np.exp(ln_k) * (times + shift))

    experiment = Experiment(
        "r",
        (Charge("A", 2.0, ("weighing",)),),
        times,
        ("A",),
        model(np.log(0.2), 0.02, -0.01, 0.1)[:, None],
        np.full((3, 1), 0.05),
        signal_factors={"A": ("standard",)},
        time_shift="clock",
    )
    nuisances = [
        Nuisance("weighing", "stock", 0.02),
        Nuisance("standard", "standard", 0.01),
        Nuisance("clock", "r", 0.2, kind="time shift"),
    ]
    fit = fit_globally(network, [experiment], [Constant("k", 0.3)], nuisances=nuisances)
    assert fit.status == "converged", fit.message
    h = 1e-5
    for column in range(4):
        step = np.zeros(4)
        step[column] = h
        slope = (model(*(fit.theta + step)) - model(*(fit.theta - step))) / (2 * h * 0.05)
        np.testing.assert_allclose(fit.experiments[0].jacobian[:, column], slope, rtol=1e-5, atol=1e-7)
    np.testing.assert_allclose(fit.experiments[0].model[:, 0], model(*fit.theta), rtol=1e-7)


def test_missing_points_are_skipped_and_named_by_row_and_column():
    experiment = made("r1")
    values = experiment.values.copy()
    values[3, 1] = np.nan
    values[:, 2] = np.nan
    fit = fit_globally(NETWORK, [replace(experiment, values=values)], start())
    assert fit.status == "converged"
    assert fit.n_points == 47
    found = fit.experiments[0]
    assert (3, 1) not in set(zip(found.rows.tolist(), found.columns.tolist(), strict=True))
    assert np.isnan(found.residuals[3, 1])
    assert np.isfinite(found.model).all()
    assert found.jacobian.shape == (47, 2)


def test_constants_of_a_group_own_ones_and_held_ones_are_told_apart_by_name():
    runs = [
        made("r1", k1=0.5, groups={"temperature": "298.15 K"}),
        made("r2", k1=0.9, groups={"temperature": "310 K"}, seed=2),
        made("r3", k1=0.9, k2=0.3, groups={"temperature": "310 K"}, seed=3),
    ]
    constants = [
        Constant("k_1", 0.3, scope="in a group", group_by="temperature", starts={"310 K": 1.5}),
        Constant("k_2", 0.2, scope="own per run"),
    ]
    fit = fit_globally(NETWORK, runs, constants)
    assert [p.name for p in fit.parameters] == [
        "k_1 @ 298.15 K",
        "k_2 @ r1",
        "k_1 @ 310 K",
        "k_2 @ r2",
        "k_2 @ r3",
    ]
    np.testing.assert_allclose(fit.parameter("k_1 @ 310 K").value, 0.9, rtol=0.03)
    np.testing.assert_allclose(fit.parameter("k_2 @ r3").value, 0.3, rtol=0.05)
    held = fit_globally(NETWORK, runs[:1], [Constant("k_1", 0.3), Constant("k_2", 0.2, scope="held")])
    assert [p.name for p in held.parameters] == ["k_1"]


def test_a_start_concentration_of_its_own_per_run_replaces_the_charge():
    runs = [made("r1", a=1.1), made("r2", a=0.8, seed=2)]
    fit = fit_globally(NETWORK, runs, start(), start_concentrations=[StartConcentration("A", 1.0)])
    np.testing.assert_allclose(fit.parameter("[A]0 @ r1").value, 1.1, rtol=0.02)
    np.testing.assert_allclose(fit.parameter("[A]0 @ r2").value, 0.8, rtol=0.02)


def test_one_sigma_is_profiled_and_intervals_use_students_t():
    runs = [made("r1", sigma=0.02), made("r2", sigma=0.02, seed=5)]
    fit = fit_globally(NETWORK, runs, start(), settings=ONE_SIGMA)
    n, p = fit.n_points, 2
    rss = fit.residual_sum_of_squares
    np.testing.assert_allclose(fit.sigmas[0].value, np.sqrt(rss / (n - p)), rtol=1e-6)
    np.testing.assert_allclose(fit.sigmas[0].maximum_likelihood, np.sqrt(rss / n), rtol=1e-9)
    np.testing.assert_allclose(fit.minus_two_log_likelihood, n + n * np.log(rss / n), rtol=1e-9)
    np.testing.assert_allclose(fit.sigmas[0].value, 0.02, rtol=0.2)
    assert fit.n_estimated_sigmas == 1
    assert fit.quantile > 1.96 and fit.quantile_kind == "Student's t"


def test_one_sigma_per_observable_settles_at_the_fixed_point():
    experiment = made("r1", seed=None)
    rng = np.random.default_rng(4)
    noise = rng.normal(size=experiment.values.shape) * [0.002, 0.02, 0.05]
    experiment = replace(experiment, values=experiment.values + noise, sigma=None)
    settings = Settings(error_model="one sigma per observable")
    fit = fit_globally(NETWORK, [experiment], start(), settings=settings)
    assert fit.status == "converged", fit.message
    assert [s.observable for s in fit.sigmas] == ["A", "B", "C"]
    np.testing.assert_allclose([s.value for s in fit.sigmas], [0.002, 0.02, 0.05], rtol=0.4)
    for column, sigma in enumerate(fit.sigmas):
        rms = np.sqrt(np.mean(fit.experiments[0].residuals[:, column] ** 2))
        np.testing.assert_allclose(sigma.maximum_likelihood, rms, rtol=1e-9)
    # the same weights given as tabulated lead to the same constants
    tabulated = np.tile([s.maximum_likelihood for s in fit.sigmas], (len(TIMES), 1))
    again = fit_globally(NETWORK, [replace(experiment, sigma=tabulated)], start())
    for name in ("k_1", "k_2"):
        np.testing.assert_allclose(fit.parameter(name).value, again.parameter(name).value, rtol=1e-6)
    assert sum(s.degrees_of_freedom for s in fit.sigmas) == pytest.approx(fit.n_points - 2)


def test_a_prior_pulls_and_is_counted_on_the_fitted_scale():
    runs = [made("r1")]
    free = fit_globally(NETWORK, runs, start())
    prior = Prior(mean=1.0, sd=0.001)
    tight = fit_globally(NETWORK, runs, [Constant("k_1", 0.1, prior=prior), Constant("k_2", 1.0)])
    assert free.parameter("k_1").value < tight.parameter("k_1").value < 1.0
    pull = np.log(tight.parameter("k_1").value) / 0.001
    np.testing.assert_allclose(tight.minus_two_log_prior, pull**2 + 2 * np.log(0.001), rtol=1e-6)
    assert tight.parameter("k_1").set_by_prior
    assert not free.parameter("k_1").set_by_prior


def test_a_ratio_is_reported_as_the_only_thing_determined():
    """Only the sum k_1 + k_2 acts when nothing but A is seen."""
    network = parse_mechanism("A --k_1--> B\nA --k_2--> C")
    curves = simulate(network, constants={"k_1": 0.2, "k_2": 0.1}, start={"A": 1.0}, times=TIMES)
    values = curves.of("A")[:, None] + 0.01 * np.random.default_rng(1).normal(size=(len(TIMES), 1))
    experiment = Experiment("r", (Charge("A", 1.0),), TIMES, ("A",), values)
    fit = fit_globally(
        network, [experiment], [Constant("k_1", 0.1), Constant("k_2", 0.1)], settings=ONE_SIGMA
    )
    assert fit.status == "converged"
    for name, other in (("k_1", "k_2"), ("k_2", "k_1")):
        p = fit.parameter(name)
        assert not p.determined
        assert p.standard_error is None and p.lower is None and p.upper is None
        assert other in p.why_not
    total = fit.parameter("k_1").value + fit.parameter("k_2").value
    np.testing.assert_allclose(total, 0.3, rtol=0.05)


def test_a_constant_without_effect_is_reported_and_the_others_keep_their_intervals():
    network = parse_mechanism("A --k_1--> B\nX --k_2--> Y")
    fit = fit_globally(network, [made("r1", observed=("A",))], [Constant("k_1", 0.2), Constant("k_2", 1.0)])
    assert fit.status == "converged"
    assert "no effect" in fit.parameter("k_2").why_not
    assert fit.parameter("k_2").standard_error is None
    assert fit.parameter("k_1").standard_error > 0


def test_a_constant_pushed_against_its_bound_is_flagged_and_has_no_interval():
    constants = [Constant("k_1", 0.3, upper=0.4), Constant("k_2", 0.2)]
    fit = fit_globally(NETWORK, [made("r1")], constants)
    p = fit.parameter("k_1")
    assert p.at_bound and not p.determined
    np.testing.assert_allclose(p.value, 0.4, rtol=2e-3)
    assert p.upper is None
    assert fit.parameter("k_2").standard_error > 0


def test_as_many_parameters_as_points_leave_no_scatter_to_judge_by():
    network = parse_mechanism("A --k--> B")
    experiment = Experiment("r", (Charge("A", 1.0),), np.array([1.0]), ("A",), np.array([[0.7]]))
    fit = fit_globally(network, [experiment], [Constant("k", 0.1)], settings=ONE_SIGMA)
    np.testing.assert_allclose(fit.parameter("k").value, -np.log(0.7), rtol=1e-5)
    assert fit.parameter("k").standard_error is None
    assert "degree of freedom" in fit.parameter("k").why_not


def test_several_starts_find_the_lower_of_two_minima_and_list_both():
    """With only C seen, k_1 and k_2 of A to B to C can be exchanged; a slight view of A breaks the tie."""
    curves = simulate(NETWORK, constants={"k_1": 1.0, "k_2": 0.1}, start={"A": 1.0}, times=TIMES)
    values = np.stack([curves.of("C"), curves.of("A")], axis=1)
    sigma = np.stack([np.full(len(TIMES), 1e-3), np.full(len(TIMES), 0.2)], axis=1)
    experiment = Experiment("r", (Charge("A", 1.0),), TIMES, ("C", "A"), values, sigma)
    constants = [Constant("k_1", 0.08), Constant("k_2", 1.2)]
    stuck = fit_globally(NETWORK, [experiment], constants)
    assert stuck.parameter("k_1").value < 0.2
    fit = fit_globally(
        NETWORK, [experiment], constants, settings=Settings(starts=12, seed=3, start_spread=30.0)
    )
    np.testing.assert_allclose(fit.parameter("k_1").value, 1.0, rtol=1e-3)
    assert len(fit.minima) == 2
    assert fit.minima[0].cost < fit.minima[1].cost
    assert sum(m.found for m in fit.minima) <= 12
    again = fit_globally(
        NETWORK, [experiment], constants, settings=Settings(starts=12, seed=3, start_spread=30.0)
    )
    assert again.minima == fit.minima


def test_the_same_fit_gives_the_same_outcome_apart_from_the_seconds():
    first = fit_globally(NETWORK, [made("r1")], start())
    second = fit_globally(NETWORK, [made("r1")], start())
    assert first == second
    assert pickle.loads(pickle.dumps(first)) == first
    assert first != fit_globally(NETWORK, [made("r1", seed=9)], start())


def test_progress_is_told_and_the_cost_never_rises_beyond_integration_noise():
    told = []
    fit = fit_globally(NETWORK, [made("r1")], start(), on_progress=lambda i, cost: told.append((i, cost)))
    assert [i for i, _ in told] == list(range(1, len(told) + 1))
    assert fit.iterations == len(told)
    costs = [c for _, c in told]
    assert all(b <= a + 1e-5 for a, b in pairwise(costs))
    np.testing.assert_allclose(costs[-1], fit.cost)


def test_a_fit_stops_on_request_and_keeps_its_best_point():
    told = []
    fit = fit_globally(
        NETWORK,
        [made("r1"), made("r2")],
        start(),
        on_progress=lambda i, cost: told.append(cost),
        should_stop=lambda: len(told) >= 2,
    )
    assert fit.status == "stopped"
    assert "request" in fit.message
    assert fit.cost <= told[0]
    assert len(fit.parameters) == 2


def test_a_fit_out_of_time_says_so():
    fit = fit_globally(NETWORK, [made("r1")], start(), settings=Settings(max_seconds=1e-9))
    assert fit.status == "stopped"
    assert "time limit" in fit.message


def test_too_few_iterations_are_not_convergence():
    fit = fit_globally(NETWORK, [made("r1")], start(), settings=Settings(max_iterations=1))
    assert fit.status == "not converged"
    assert "iterations" in fit.message
    assert np.isfinite(fit.cost)


def test_a_fit_whose_model_blows_up_at_the_start_cannot_start_and_names_the_experiment():
    network = parse_mechanism("2 A --k--> 3 A")
    experiment = Experiment(
        "run-07",
        (Charge("A", 1.0),),
        np.array([0.5, 1.0]),
        ("A",),
        np.array([[1.05], [1.11]]),
        np.full((2, 1), 0.01),
    )
    fit = fit_globally(network, [experiment], [Constant("k", 5.0)], settings=Settings(max_steps=500))
    assert fit.status == "cannot start"
    assert "run-07" in fit.message
    assert fit.parameters == ()
    rescued = fit_globally(
        network,
        [experiment],
        [Constant("k", 5.0)],
        settings=Settings(max_steps=500, starts=8, start_spread=100.0),
    )
    assert rescued.status == "converged", rescued.message
    np.testing.assert_allclose(rescued.parameter("k").value, 0.1, rtol=0.1)


def test_trial_points_that_blow_up_make_the_search_step_back():
    network = parse_mechanism("2 A --k--> 3 A")
    times = np.array([0.5, 1.0])
    experiment = Experiment(
        "r", (Charge("A", 1.0),), times, ("A",), (1 / (1 - 0.9 * times))[:, None], np.full((2, 1), 0.01)
    )
    fit = fit_globally(network, [experiment], [Constant("k", 0.05)], settings=Settings(max_steps=2000))
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.parameter("k").value, 0.9, rtol=1e-4)


def test_a_factor_shared_by_twenty_runs_does_not_become_sharper_with_their_number():
    """The standard's error is common: twenty runs know the absolute scale no better than one standard does.

    A zero-order rate shows the scale directly: signal = s * k t, so ln k has at least the standard's sd.
    """
    network = parse_mechanism("nothing --k--> P")
    times = np.linspace(1.0, 10.0, 10)

    def experiments(owned):
        return [
            Experiment(
                f"r{i}",
                (),
                times,
                ("P",),
                0.1 * times[:, None],
                np.full((10, 1), 1e-3),
                signal_factors={"P": (f"standard {i}" if owned else "standard",)},
            )
            for i in range(20)
        ]

    shared = fit_globally(
        network, experiments(False), [Constant("k", 0.05)], nuisances=[Nuisance("standard", "standard", 0.03)]
    )
    own = fit_globally(
        network,
        experiments(True),
        [Constant("k", 0.05)],
        nuisances=[Nuisance(f"standard {i}", f"r{i}", 0.03) for i in range(20)],
    )
    k = shared.parameter("k")
    np.testing.assert_allclose(k.standard_error / k.value, 0.03, rtol=0.01)
    k = own.parameter("k")
    np.testing.assert_allclose(k.standard_error / k.value, 0.03 / np.sqrt(20), rtol=0.02)
    assert shared.pulls[0].experiments == tuple(f"r{i}" for i in range(20))
    assert shared.pulls[0].owner == "standard"


def test_intervals_cover_the_truth_about_as_often_as_they_say():
    """150 simulated data sets; 95 % intervals of two constants miss 15 of 300 on average (2 to 32 allowed)."""
    missed = 0
    truth = {"k_1": 0.5, "k_2": 0.2}
    clean = made("r1", seed=None, sigma=0.03)
    rng = np.random.default_rng(20)
    for _ in range(150):
        values = clean.values + 0.03 * rng.normal(size=clean.values.shape)
        constants = [Constant("k_1", 0.45), Constant("k_2", 0.22)]
        fit = fit_globally(NETWORK, [replace(clean, values=values)], constants, settings=ONE_SIGMA)
        assert fit.status == "converged"
        for name, true in truth.items():
            p = fit.parameter(name)
            missed += not p.lower < true < p.upper
    assert 2 <= missed <= 32


def test_a_constant_that_may_be_negative_moves_on_a_linear_scale():
    network = parse_mechanism("A --{ k*[A]*(1 + c*[A]) }--> B")
    curves = simulate(network, constants={"k": 0.2, "c": -0.5}, start={"A": 1.0}, times=TIMES)
    experiment = Experiment(
        "r", (Charge("A", 1.0),), TIMES, ("A",), curves.of("A")[:, None], np.full((len(TIMES), 1), 1e-3)
    )
    constants = [Constant("k", 0.1), Constant("c", 0.0, positive=False)]
    fit = fit_globally(network, [experiment], constants)
    assert fit.status == "converged", fit.message
    c = fit.parameter("c")
    np.testing.assert_allclose(c.value, -0.5, rtol=1e-4)
    assert c.scale == "linear"
    np.testing.assert_allclose(c.upper - c.value, c.value - c.lower)
