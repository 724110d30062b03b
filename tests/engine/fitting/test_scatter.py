"""Fitted sigmas are worth the points that they come from, and so are the intervals made of them."""

import numpy as np
import pytest
from scipy import stats

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import (
    Charge,
    Constant,
    Experiment,
    Nuisance,
    Settings,
    StartConcentration,
)

DECAY = parse_mechanism("A --k--> B")
TWO = parse_mechanism("A --k_1--> B\nC --k_2--> D")
PER_OBSERVABLE = Settings(error_model="one sigma per observable")
ONE_SIGMA = Settings(error_model="one sigma")
TIMES = np.linspace(5.0, 200.0, 100)
FEW = [10, 40, 70, 99]


def two_decays(rng):
    """Four points of A with a wide scatter tell k_1, a hundred of C with a narrow one tell k_2."""
    values = np.full((100, 2), np.nan)
    values[FEW, 0] = np.exp(-0.01 * TIMES[FEW]) + rng.normal(0, 0.02, 4)
    values[:, 1] = np.exp(-0.02 * TIMES) + rng.normal(0, 0.01, 100)
    return Experiment("r", (Charge("A", 1.0), Charge("C", 1.0)), TIMES, ("A", "C"), values)


def decay(seed, few, sigma_b=0.03):
    """Twenty points of A and a few of B; the start concentration is to be fitted, too."""
    rng = np.random.default_rng(seed)
    times = np.linspace(5.0, 200.0, 20)
    values = np.full((20, 2), np.nan)
    values[:, 0] = np.exp(-0.01 * times) + rng.normal(0, 0.01, 20)
    values[few, 1] = -np.expm1(-0.01 * times[few]) + rng.normal(0, sigma_b, len(few))
    return Experiment("r", (), times, ("A", "B"), values)


def fit_decay(experiment):
    starts = [StartConcentration("A", 1.2)]
    return fit_globally(
        DECAY, [experiment], [Constant("k", 0.02)], start_concentrations=starts, settings=PER_OBSERVABLE
    )


def test_each_constant_has_the_degrees_of_freedom_of_the_points_that_it_hangs_on():
    fit = fit_globally(
        TWO,
        [two_decays(np.random.default_rng(1))],
        [Constant("k_1", 0.01), Constant("k_2", 0.02)],
        settings=PER_OBSERVABLE,
    )
    for name, freedom in (("k_1", 3.0), ("k_2", 99.0)):
        p = fit.parameter(name)
        assert p.degrees_of_freedom == pytest.approx(freedom, rel=1e-6)
        quantile = stats.t.ppf(0.975, freedom)
        np.testing.assert_allclose(
            p.upper, p.value * np.exp(quantile * p.standard_error / p.value), rtol=1e-9
        )


def test_the_degrees_of_freedom_of_a_mixed_standard_error_are_those_of_satterthwaite():
    """A constant rate seen in two columns, 4 and 12 points with the times 1: a weighted mean of two means.

    Satterthwaite (1946): (v_1 + v_2)^2 / (v_1^2/f_1 + v_2^2/f_2) for the variance v_1 + v_2. Of a mean with
    weights 1/s^2, v_g = n_g/s_g^2 / (n_1/s_1^2 + n_2/s_2^2)^2.
    """
    network = parse_mechanism("nothing --k--> P\nnothing --k--> Q")
    rng = np.random.default_rng(12)
    times = 1.0 + 1e-9 * np.arange(12)
    values = np.full((12, 2), np.nan)
    values[:4, 0] = 1.0 + 0.05 * rng.normal(size=4)
    values[:, 1] = 1.0 + 0.1 * rng.normal(size=12)
    experiment = Experiment("r", (), times, ("P", "Q"), values)
    fit = fit_globally(network, [experiment], [Constant("k", 0.5, positive=False)], settings=PER_OBSERVABLE)
    precisions = np.array([s.n_points / s.value**2 for s in fit.sigmas])
    shares = precisions / precisions.sum() ** 2
    freedoms = np.array([s.degrees_of_freedom for s in fit.sigmas])
    expected = shares.sum() ** 2 / np.sum(shares**2 / freedoms)
    p = fit.parameter("k")
    np.testing.assert_allclose(p.standard_error**2, shares.sum(), rtol=1e-6)
    np.testing.assert_allclose(p.degrees_of_freedom, expected, rtol=1e-6)
    assert freedoms.min() < expected < freedoms.sum()


def test_with_one_sigma_every_constant_has_the_degrees_of_freedom_of_all_points():
    fit = fit_globally(
        TWO,
        [two_decays(np.random.default_rng(1))],
        [Constant("k_1", 0.01), Constant("k_2", 0.02)],
        settings=ONE_SIGMA,
    )
    assert [p.degrees_of_freedom for p in fit.parameters] == pytest.approx([102.0, 102.0])
    assert fit.degrees_of_freedom == pytest.approx(102.0)


def test_what_a_prior_alone_fixes_has_a_normal_interval():
    fit = fit_globally(
        DECAY,
        [
            Experiment(
                "r", (Charge("A", 1.0),), TIMES, ("A",), two_decays(np.random.default_rng(2)).values[:, 1:]
            )
        ],
        [Constant("k", 0.02)],
        nuisances=[Nuisance("unused", "stock", 0.05)],
        settings=ONE_SIGMA,
    )
    unused = fit.parameter("unused")
    assert unused.degrees_of_freedom is None
    np.testing.assert_allclose(unused.upper, np.exp(1.959964 * 0.05), rtol=1e-6)


def test_tabulated_sigmas_give_normal_intervals():
    experiment = two_decays(np.random.default_rng(1))
    sigma = np.tile([0.02, 0.01], (100, 1))
    fit = fit_globally(
        TWO,
        [Experiment("r", experiment.charges, TIMES, ("A", "C"), experiment.values, sigma)],
        [Constant("k_1", 0.01), Constant("k_2", 0.02)],
    )
    assert all(p.degrees_of_freedom is None for p in fit.parameters)


def test_a_sigma_that_collapsed_onto_two_points_takes_its_constants_intervals_away():
    """Two constants can go through two points exactly; their sigma then shrinks without end."""
    collapsed = 0
    for seed in range(40):
        fit = fit_decay(decay(seed, few=[6, 15]))
        k = fit.parameter("k")
        if fit.sigmas[1].degrees_of_freedom < 0.99:
            collapsed += 1
            assert not k.determined and k.standard_error is None
            assert "degree of freedom is left to estimate the scatter of B" in k.why_not
            assert fit.sigmas[1].value is None
        else:
            assert abs(k.value - 0.01) < 6 * k.standard_error
    assert 1 <= collapsed <= 10


def test_a_constant_that_does_not_need_the_few_points_keeps_its_interval():
    """One point of B, of no weight beside those of A and C, has no scatter of its own to tell."""
    rng = np.random.default_rng(6)
    values = np.column_stack([two_decays(rng).values, np.full(100, np.nan)])
    values[:, 0] = np.exp(-0.01 * TIMES) + rng.normal(0, 0.01, 100)
    values[50, 2] = 0.7
    experiment = Experiment(
        "r",
        (Charge("A", 1.0), Charge("C", 1.0), Charge("X", 1.0)),
        TIMES,
        ("A", "C", "X"),
        values,
    )
    network = parse_mechanism("A --k_1--> B\nC --k_2--> D\nX --k_3--> Y")
    constants = [Constant(f"k_{i}", 0.01) for i in (1, 2, 3)]
    fit = fit_globally(network, [experiment], constants, settings=PER_OBSERVABLE)
    assert [p.determined for p in fit.parameters] == [True, True, False]
    assert "scatter of X" in fit.parameter("k_3").why_not
    assert np.isfinite(fit.covariance[:2, :2]).all()
    assert np.isnan(fit.covariance[2]).all()


def test_values_without_any_scatter_give_no_intervals_and_the_sigma_that_was_used():
    values = np.exp(-0.01 * TIMES)[:, None]
    experiment = Experiment("r", (Charge("A", 1.0),), TIMES, ("A",), values)
    fit = fit_globally(DECAY, [experiment], [Constant("k", 0.03)], settings=ONE_SIGMA)
    assert fit.status == "converged"
    np.testing.assert_allclose(fit.parameter("k").value, 0.01, rtol=1e-6)
    assert not fit.parameter("k").determined
    assert "too small to be told from the tolerance" in fit.parameter("k").why_not
    np.testing.assert_allclose(fit.sigmas[0].value, fit.experiments[0].sigma[0, 0], rtol=1e-12)
    np.testing.assert_allclose(fit.sigmas[0].value, fit.sigmas[0].maximum_likelihood, rtol=1e-12)


def test_the_sigma_of_every_observable_is_the_one_that_its_points_were_judged_by():
    fit = fit_decay(decay(3, few=[2, 6, 10, 15]))
    for column, sigma in enumerate(fit.sigmas):
        used = fit.experiments[0].sigma[:, column]
        np.testing.assert_allclose(used[np.isfinite(used)], sigma.value, rtol=1e-12)


def test_intervals_of_a_constant_that_few_points_tell_cover_the_truth_as_often_as_they_say():
    """400 data sets with a seed of its own: 95 % intervals have to cover in 92 to 98 % of them."""
    rng = np.random.default_rng(7)
    truth = {"k_1": 0.01, "k_2": 0.02}
    covered = dict.fromkeys(truth, 0)
    for _ in range(400):
        fit = fit_globally(
            TWO, [two_decays(rng)], [Constant(n, v) for n, v in truth.items()], settings=PER_OBSERVABLE
        )
        assert fit.status == "converged"
        for name, true in truth.items():
            p = fit.parameter(name)
            covered[name] += p.lower < true < p.upper
    for name, times in covered.items():
        assert 0.92 <= times / 400 <= 0.98, f"{name}: {times}"
