"""Verdicts on runs and the comparison of models."""

from dataclasses import replace

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism, simulate
from kinetics_db.engine.comparison import (
    Thresholds,
    aicc,
    akaike_weights,
    bic,
    compare,
    effective_parameters,
    evidence_of_model,
    evidence_of_runs,
    likelihood_ratio,
)
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Nuisance, Prior, Settings
from kinetics_db.errors import InvalidInput

CHAIN = parse_mechanism("A --k_1--> B\nB --k_2--> C")
DIRECT = parse_mechanism("A --k_1--> B\nA --k_2--> C")
TIMES = np.linspace(0.5, 12.0, 24)
CONSTANTS = [Constant("k_1", 0.4), Constant("k_2", 0.3)]


def made(name, seed, sigma=0.01, stated=None, **constants):
    curves = simulate(CHAIN, constants={"k_1": 0.5, "k_2": 0.2, **constants}, start={"A": 1.0}, times=TIMES)
    values = curves.values + sigma * np.random.default_rng(seed).normal(size=curves.values.shape)
    table = np.full(values.shape, stated or sigma)
    return Experiment(name, (Charge("A", 1.0),), TIMES, ("A", "B", "C"), values, table)


def fit(network, experiments, **more):
    found = fit_globally(network, experiments, CONSTANTS, **more)
    assert found.status == "converged", found.message
    return found


RUNS = [made(f"r{i}", seed=10 + i) for i in range(4)]


def test_runs_explained_by_the_model_agree_and_carry_their_numbers():
    evidence = evidence_of_runs(fit(CHAIN, RUNS))
    assert [run.verdict for run in evidence] == ["agrees"] * 4
    freedom = sum(o.degrees_of_freedom for run in evidence for o in run.observables)
    assert freedom == pytest.approx(4 * 72 - 2)  # the traces of the hat blocks add up to the parameters
    for run in evidence:
        for o in run.observables:
            assert o.n == 24
            assert 0.3 < o.chi_square / o.degrees_of_freedom < 2.5
            assert o.nrmse < 0.05
            assert 0.5 < o.durbin_watson < 3.5
            assert abs(o.largest_standardised) < 5
            assert o.chi_square_p <= o.chi_square_p_adjusted
        assert run.thresholds == Thresholds()


def test_a_wrong_model_disagrees_with_the_runs_that_refute_it():
    evidence = evidence_of_runs(fit(DIRECT, RUNS))
    assert [run.verdict for run in evidence] == ["disagrees"] * 4
    assert evidence[0].worst_observable in ("A", "B", "C")


def test_a_single_odd_run_is_singled_out():
    odd = made("odd", seed=99, k_2=0.4)
    many = [made(f"r{i}", seed=10 + i) for i in range(10)]
    evidence = evidence_of_runs(fit(CHAIN, [*many, odd]))
    assert evidence[-1].verdict == "disagrees"
    assert sum(run.verdict == "disagrees" for run in evidence) == 1


def test_a_failed_test_with_a_small_error_is_strained_only():
    """sigma stated at a third of the true scatter: chi-square fails, the curve is within 5 % of the span."""
    runs = [made(f"r{i}", seed=10 + i, stated=0.01 / 3) for i in range(3)]
    evidence = evidence_of_runs(fit(CHAIN, runs))
    assert {run.verdict for run in evidence} == {"strained"}


def test_stated_uncertainties_that_are_too_large_are_called_so():
    runs = [made(f"r{i}", seed=10 + i, stated=0.1) for i in range(3)]
    evidence = evidence_of_runs(fit(CHAIN, runs))
    assert all(run.verdict == "agrees" for run in evidence)
    assert "uncertainties too large to test" in evidence[0].note


def test_with_a_fitted_sigma_the_strongest_word_is_consistent():
    evidence = evidence_of_runs(fit(CHAIN, RUNS, settings=Settings(error_model="one sigma")))
    assert {run.verdict for run in evidence} == {"consistent"}
    wrong = evidence_of_runs(fit(DIRECT, RUNS, settings=Settings(error_model="one sigma")))
    assert "disagrees" in {run.verdict for run in wrong}


def test_an_observable_without_points_is_not_tested_and_does_not_decide():
    values = RUNS[0].values.copy()
    values[:, 2] = np.nan
    evidence = evidence_of_runs(fit(CHAIN, [replace(RUNS[0], values=values), RUNS[1]]))
    assert [o.verdict for o in evidence[0].observables] == ["agrees", "agrees", "not tested"]
    assert evidence[0].verdict == "agrees"
    assert evidence[0].observables[2].chi_square is None


def test_below_ten_points_there_is_no_runs_test():
    short = [replace(r, times=r.times[:9], values=r.values[:9], sigma=r.sigma[:9]) for r in RUNS]
    evidence = evidence_of_runs(fit(CHAIN, short))
    assert all(o.runs_p is None for run in evidence for o in run.observables)


def test_a_large_pull_of_a_runs_own_nuisance_makes_it_strained():
    """The charge is 10 % off where 2 % was claimed: the curve fits, the pull tells."""
    runs = [replace(r, charges=(Charge("A", 1.0, (f"weighing {r.name}",)),)) for r in RUNS]
    runs[2] = replace(runs[2], charges=(Charge("A", 0.9, ("weighing r2",)),))
    nuisances = [Nuisance(f"weighing {r.name}", r.name, 0.02) for r in RUNS]
    evidence = evidence_of_runs(fit(CHAIN, runs, nuisances=nuisances))
    assert [run.verdict for run in evidence] == ["agrees", "agrees", "strained", "agrees"]
    assert evidence[2].pulls[0].name == "weighing r2"
    assert evidence[2].pulls[0].pull > 3


def charged_from_a_stock(factor, stated, runs=RUNS):
    """Runs whose charge is stated too low by a factor, all from one stock with its stated uncertainty."""
    runs = [replace(r, charges=(Charge("A", 1.0 / factor, ("stock",)),)) for r in runs]
    return fit(CHAIN, runs, nuisances=[Nuisance("stock", "stock", stated)])


def test_a_large_pull_of_a_shared_cause_makes_every_run_strained_that_uses_it():
    apart = replace(made("apart", seed=50), charges=(Charge("A", 1.0, ("weighing",)),))
    runs = [replace(r, charges=(Charge("A", 0.9, ("stock",)),)) for r in RUNS[:2]]
    nuisances = [Nuisance("stock", "stock", 0.02), Nuisance("weighing", "apart", 0.02)]
    evidence = evidence_of_runs(fit(CHAIN, [*runs, apart], nuisances=nuisances))
    assert [run.verdict for run in evidence] == ["strained", "strained", "agrees"]
    assert [[p.name for p in run.pulls] for run in evidence] == [["stock"], ["stock"], ["weighing"]]
    assert evidence[0].pulls[0].used_by == 2
    assert evidence[0].pulls == evidence[1].pulls
    assert evidence[0].pulls[0].pull > 3
    assert "stock: a pull of " in evidence[0].note
    assert evidence[2].note == ""


def test_a_small_pull_of_a_shared_cause_is_listed_and_strains_nothing():
    evidence = evidence_of_runs(charged_from_a_stock(1.01, 0.02))
    assert [run.verdict for run in evidence] == ["agrees"] * 4
    assert all(0 < abs(run.pulls[0].pull) < 3 for run in evidence)


def test_a_run_taken_up_by_its_own_parameters_is_strained_when_one_of_them_is_pulled_far():
    network = parse_mechanism("A --k--> B")
    one = Experiment(
        "one",
        (Charge("A", 1.0, ("charge",)),),
        np.array([0.0]),
        ("A",),
        np.array([[1.2]]),
        np.array([[1e-4]]),
    )
    times = np.linspace(1.0, 10.0, 12)
    other = Experiment(
        "other", (Charge("A", 1.0),), times, ("A",), np.exp(-0.3 * times)[:, None], np.full((12, 1), 0.01)
    )
    found = fit_globally(
        network, [one, other], [Constant("k", 0.2)], nuisances=[Nuisance("charge", "one", 0.02)]
    )
    evidence = evidence_of_runs(found)
    assert evidence[0].observables[0].verdict == "not tested"
    assert evidence[0].verdict == "strained"


@pytest.mark.parametrize(
    ("error_model", "verdict"), [("as tabulated", "agrees"), ("one sigma", "consistent")]
)
def test_a_fit_without_noise_is_not_strained_by_the_error_of_its_integration(error_model, verdict):
    """The values are those of the closed form, so that all residuals are the integrator's."""
    values = np.exp(-0.5 * TIMES)[:, None]
    run = Experiment("r", (Charge("A", 1.0),), TIMES, ("A",), values, np.full(values.shape, 0.01))
    network = parse_mechanism("A --k--> B")
    found = fit_globally(
        network, [run], [Constant("k", 0.4)], settings=Settings(error_model=error_model, rtol=1e-6)
    )
    strict = evidence_of_runs(found, rtol=1e-13)[0].observables[0]
    assert strict.runs_p < 0.01, "the residuals have long runs of like sign"
    (evidence,) = evidence_of_runs(found, rtol=1e-6)
    assert evidence.observables[0].runs_p is None
    assert evidence.verdict == verdict


def test_residuals_that_an_integration_can_tell_from_zero_keep_their_signs():
    """A bend of 1e-4 of the values, a hundred times the error of integration, under a sigma ten times larger."""
    values = np.exp(-0.5 * TIMES)[:, None] * (1.0 + 1e-4 * np.sin(TIMES[:, None]))
    run = Experiment("r", (Charge("A", 1.0),), TIMES, ("A",), values, np.full(values.shape, 1e-3))
    found = fit_globally(parse_mechanism("A --k--> B"), [run], [Constant("k", 0.4)])
    assert evidence_of_runs(found)[0].verdict == "strained"


def test_a_run_that_alone_determines_its_constants_is_not_tested():
    one = Experiment(
        "one", (Charge("A", 1.0),), np.array([2.0]), ("A",), np.array([[0.4]]), np.array([[0.01]])
    )
    network = parse_mechanism("A --k--> B")
    found = fit_globally(network, [one], [Constant("k", 0.3)])
    assert evidence_of_runs(found)[0].verdict == "not tested"


def test_aicc_follows_the_worked_example_of_least_squares():
    """n = 6, RSS = 25.990267, K = 3 with sigma counted (BOD data of Bates & Watts 1988): AICc 26.79577591."""
    value = aicc(6 * np.log(25.990267 / 6), 6, 3)
    assert value == pytest.approx(26.79577591532741, rel=1e-12)
    assert aicc(1.0, 4, 3) is None
    assert aicc(1.0, 5, 3) == pytest.approx(1.0 + 6.0 + 24.0)


def test_akaike_weights_follow_the_worked_example():
    """Differences 0, 2, 7 (Burnham & Anderson 2002, their formula)."""
    expected = [0.7152682759694339, 0.2631324936512963, 0.021599230379269717]
    assert akaike_weights([10.0, 12.0, 17.0]) == pytest.approx(expected)


def test_the_criteria_of_a_fit_with_one_sigma_are_those_of_least_squares_up_to_a_constant():
    found = fit(CHAIN, RUNS, settings=Settings(error_model="one sigma"))
    evidence = evidence_of_model(found)
    n, rss = found.n_points, found.residual_sum_of_squares
    assert evidence.k == 3
    assert evidence.aicc == pytest.approx(n + aicc(n * np.log(rss / n), n, 3))
    assert evidence.bic == pytest.approx(bic(n + n * np.log(rss / n), n, 3))
    assert evidence_of_model(fit(CHAIN, RUNS)).k == 2  # tabulated sigmas are not counted


def test_a_parameter_with_a_prior_counts_by_what_the_data_say_of_it():
    runs = [replace(r, charges=(Charge("A", 1.0, ("stock",)),)) for r in RUNS]
    loose = fit(CHAIN, runs, nuisances=[Nuisance("stock", "stock", 10.0)])
    tight = fit(CHAIN, runs, nuisances=[Nuisance("stock", "stock", 1e-6)])
    assert effective_parameters(loose) == pytest.approx(3.0, abs=1e-3)
    assert effective_parameters(tight) == pytest.approx(2.0, abs=1e-3)


def test_the_true_model_wins_by_far():
    comparison = compare({"chain": fit(CHAIN, RUNS), "direct": fit(DIRECT, RUNS)})
    assert comparison.best == "chain"
    assert comparison.differences["chain"] == 0.0
    assert comparison.differences["direct"] > 10
    assert comparison.weights["chain"] == pytest.approx(1.0)


def test_no_weights_are_given_when_the_residuals_of_the_best_model_are_correlated():
    comparison = compare({"direct": fit(DIRECT, RUNS)})
    assert comparison.weights is None
    assert "correlated" in comparison.why_no_weights


def test_aicc_is_undefined_for_too_few_points():
    short = replace(RUNS[0], times=TIMES[:1], values=RUNS[0].values[:1], sigma=RUNS[0].sigma[:1])
    found = fit_globally(CHAIN, [short], CONSTANTS)
    evidence = evidence_of_model(found)
    assert evidence.aicc is None
    assert "3 points" in evidence.why_no_aicc
    assert compare({"m": found}).weights is None


@pytest.mark.parametrize(
    "other",
    [
        RUNS[:3],
        [*RUNS[:3], made("r3", seed=77)],
        [*RUNS[:3], replace(RUNS[3], sigma=RUNS[3].sigma * 2)],
        [*RUNS[:3], replace(RUNS[3], times=TIMES + 0.1)],
    ],
    ids=["other runs", "other values", "other uncertainties", "other times"],
)
def test_fits_of_different_data_are_not_compared(other):
    with pytest.raises(InvalidInput, match="same data"):
        compare({"a": fit(CHAIN, RUNS), "b": fit(CHAIN, other)})


def test_the_likelihood_ratio_of_nested_models_counts_the_extra_constants():
    tied = fit(CHAIN, RUNS)
    apart = fit_globally(CHAIN, RUNS, [Constant("k_1", 0.4, scope="own per run"), Constant("k_2", 0.3)])
    ratio = likelihood_ratio(apart, tied)
    assert ratio.degrees_of_freedom == pytest.approx(3.0)
    assert 0.001 < ratio.p < 1.0
    assert likelihood_ratio(apart, tied, constant_at_zero=True).p == pytest.approx(ratio.p / 2)
    with pytest.raises(InvalidInput):
        likelihood_ratio(tied, apart)


def test_the_criteria_are_of_the_likelihood_and_the_squared_pulls_together():
    stock = charged_from_a_stock(1.05, 0.02)
    evidence = evidence_of_model(stock)
    pull = np.log(stock.parameter("stock").value) / 0.02
    assert abs(pull) > 2
    assert evidence.sum_of_squared_pulls == pytest.approx(pull**2)
    assert evidence.minus_two_log_likelihood == stock.minus_two_log_likelihood
    paid = stock.minus_two_log_likelihood + pull**2
    assert evidence.aicc == pytest.approx(aicc(paid, evidence.n, evidence.k))
    assert evidence.bic == pytest.approx(bic(paid, evidence.n, evidence.k))
    assert evidence_of_model(fit(CHAIN, RUNS)).sum_of_squared_pulls == 0.0


def test_a_prior_on_a_constant_is_paid_like_a_nuisance_and_its_normalisation_is_left_out():
    constants = [Constant("k_1", 0.4, prior=Prior(0.45, 0.05)), Constant("k_2", 0.3, prior=Prior(0.2, 10.0))]
    found = fit_globally(CHAIN, RUNS, constants)
    pulls = [
        np.log(found.parameter(name).value / mean) / sd
        for name, mean, sd in (("k_1", 0.45, 0.05), ("k_2", 0.2, 10.0))
    ]
    assert evidence_of_model(found).sum_of_squared_pulls == pytest.approx(sum(p**2 for p in pulls))


FORKED = parse_mechanism("S --k--> P\nS --q--> Q")


def forked_runs(seed, q, sigma=0.005, stock=1.0):
    """P alone is seen: a second product and a stock that is too weak look the same but for the stock's price."""
    random = np.random.default_rng(seed)
    times = np.array([50.0, 100.0, 200.0, 300.0, 400.0, 600.0, 800.0, 1000.0])
    exact = stock * 0.01 / (0.01 + q) * -np.expm1(-(0.01 + q) * times)
    return [
        Experiment(
            f"r{i}",
            (Charge("S", 1.0, ("stock",)),),
            times,
            ("P",),
            (exact + sigma * random.normal(size=8))[:, None],
            np.full((8, 1), sigma),
        )
        for i in range(3)
    ]


def with_and_without_the_fork(runs):
    nuisances = [Nuisance("stock", "stock", 0.05)]
    free = [Constant("k", 0.01), Constant("q", 1e-4, positive=False)]
    held = [Constant("k", 0.01), Constant("q", 0.0, "held")]
    return tuple(fit_globally(FORKED, runs, c, nuisances=nuisances) for c in (free, held))


def test_a_wrong_model_pays_for_the_stock_that_it_bends():
    """Without the second path the stock has to be 20 % too weak, over four deviations of its prior."""
    forked, plain = with_and_without_the_fork(forked_runs(5, q=0.0025))
    assert plain.parameter("stock").value == pytest.approx(0.8, abs=0.01)
    assert plain.minus_two_log_likelihood - forked.minus_two_log_likelihood < 1.0, (
        "free of charge in ln L alone"
    )
    comparison = compare({"forked": forked, "plain": plain})
    assert comparison.best == "forked"
    assert comparison.differences["plain"] > 15
    ratio = likelihood_ratio(forked, plain)
    assert ratio.degrees_of_freedom == 1
    assert ratio.p < 1e-4


def test_the_likelihood_ratio_rejects_a_true_model_as_often_as_its_level_says():
    """60 simulated sets with an error of the stock: at 5 % at most 8 rejections (binomial, p = 0.005), median 0.5."""
    p = []
    for seed in range(60):
        stock = np.exp(0.05 * np.random.default_rng(10_000 + seed).normal())
        forked, plain = with_and_without_the_fork(forked_runs(seed, q=0.0, stock=stock))
        p.append(likelihood_ratio(forked, plain).p)
    assert sum(value < 0.05 for value in p) <= 8
    assert 0.3 < np.median(p) < 0.7


def test_a_fit_that_did_not_converge_is_not_ranked_and_no_weights_are_given():
    stuck = fit_globally(DIRECT, RUNS, CONSTANTS, settings=Settings(max_iterations=1))
    assert stuck.status == "not converged"
    comparison = compare({"stuck": stuck, "chain": fit(CHAIN, RUNS)})
    assert comparison.best == "chain"
    assert comparison.differences == {"stuck": None, "chain": 0.0}
    assert comparison.weights is None
    assert "stuck is not converged" in comparison.why_no_weights
    assert compare({"stuck": stuck}).best is None
    with pytest.raises(InvalidInput, match="reduced model is not converged"):
        likelihood_ratio(fit(CHAIN, RUNS), stuck)


def test_chi_square_p_values_are_spread_evenly_when_the_model_is_true():
    """40 simulated fits of 4 runs: the mean of 480 p-values is 0.5 within 0.06 (over four standard errors)."""
    p = []
    for seed in range(40):
        runs = [made(f"r{i}", seed=1000 + 4 * seed + i) for i in range(4)]
        for run in evidence_of_runs(fit(CHAIN, runs)):
            p += [o.chi_square_p for o in run.observables]
    assert np.mean(p) == pytest.approx(0.5, abs=0.06)


def test_an_observable_that_is_zero_throughout_and_fitted_exactly_is_judged_without_a_crash():
    network = parse_mechanism("A --k--> B\nX --q--> Y")
    values = np.stack([np.exp(-0.3 * TIMES), np.zeros(len(TIMES))], axis=1)
    run = Experiment("r", (Charge("A", 1.0),), TIMES, ("A", "Y"), values)
    constants = [Constant("k", 0.1), Constant("q", 0.1)]
    found = fit_globally(network, [run], constants, settings=Settings(error_model="one sigma per observable"))
    assert found.parameter("k").value == pytest.approx(0.3, rel=1e-5)
    evidence = evidence_of_runs(found)[0]
    assert evidence.observables[1].nrmse == 0.0
    assert np.isfinite(found.cost)


def test_a_fit_without_a_result_is_not_judged():
    found = fit_globally(CHAIN, RUNS, CONSTANTS, settings=Settings(max_seconds=1e-9))
    with pytest.raises(InvalidInput, match="no result"):
        evidence_of_runs(found)
