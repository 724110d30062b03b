"""Whether what is true in *tern* comes back out of its files."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.stats import chi2

from kinetics_db.demo.invented.loading import constants_of
from kinetics_db.demo.tern import SEED, tern_problem
from kinetics_db.demo.tern.mechanisms import RIGHT, RIVALS
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.demo.tern.truth import CONSTANTS
from kinetics_db.engine import fit_globally
from kinetics_db.engine.comparison import compare, evidence_of_runs
from kinetics_db.engine.fitting.outcome import FitOutcome

SEEDS = range(1, 21)  # fixed before the first of them was looked at
BY_NAME = {rival.name: rival for rival in RIVALS}
WRONG = [name for name in BY_NAME if name != RIGHT]


@cache
def fitted(name: str, seed: int) -> FitOutcome:
    rival = BY_NAME[name]
    problem = tern_problem(seed, mechanism=rival.text)
    return fit_globally(
        problem.network, problem.experiments, constants_of(rival), nuisances=problem.nuisances
    )


def distance_from_truth(outcome: FitOutcome) -> tuple[float, int]:
    """(found - true)' C^-1 (found - true) over the logarithms of the constants, and how many there are."""
    at = [i for i, p in enumerate(outcome.parameters) if p.kind == "constant"]
    true = []
    for i in at:
        parameter = outcome.parameters[i]
        kelvin = float(str(parameter.place).removesuffix(" K"))
        true.append(np.log(CONSTANTS[round(kelvin - 273.15, 6)][parameter.base]))
    away = outcome.theta[at] - np.array(true)
    return float(away @ np.linalg.solve(outcome.covariance[np.ix_(at, at)], away)), len(at)


def verdicts(name: str, seed: int) -> list[str]:
    return [run.verdict for run in evidence_of_runs(fitted(name, seed))]


def test_the_plan_is_24_runs_at_three_temperatures_with_replicates_and_a_control() -> None:
    assert len(PLAN.runs) == 24
    assert {run.celsius for run in PLAN.runs} == set(CONSTANTS)
    assert [run.control_kind for run in PLAN.runs if run.control_kind] == ["without reagent"]
    assert len([run for run in PLAN.runs if run.replicate_of]) == 3
    assert all(15 <= len(run.times) <= 25 for run in PLAN.runs)
    assert sum(len(run.missing) for run in PLAN.runs) == 3


def test_fits_start_from_values_that_are_off_by_factors_of_two_to_five() -> None:
    middle = CONSTANTS[25.0]
    ratios = [start / middle[name] for name, start in BY_NAME[RIGHT].starts.items()]
    assert len(ratios) == len(middle)
    assert all(2 < max(ratio, 1 / ratio) < 5 for ratio in ratios)


def test_the_causes_of_error_are_shared_as_the_bottles_and_solutions_were() -> None:
    problem = tern_problem(SEED)
    names = {nuisance.name for nuisance in problem.nuisances}
    assert {"stock standard A", "stock standard B", "lot L-1 purity", "lot B-1 purity"} <= names
    assert not any("standard" in name for name in names if name.startswith("run"))
    used = [f for e in problem.experiments for f in e.signal_factors["lactone"]]
    assert {used.count("stock standard A"), used.count("stock standard B")} == {13, 11}
    weighed = [n for e in problem.experiments for c in e.charges if c.species == "lactone" for n in c.factors]
    assert weighed.count("lot L-1 purity") == 24
    assert len([name for name in weighed if name.startswith("run")]) == 24


def test_the_right_version_comes_back_with_the_truth_in_its_joint_region() -> None:
    outcome = fitted(RIGHT, SEED)
    assert outcome.status == "converged"
    distance, count = distance_from_truth(outcome)
    assert count == 12
    assert distance <= chi2.ppf(0.95, count)
    assert all(p.determined and not p.set_by_prior for p in outcome.parameters if p.kind == "constant")


def test_the_right_version_agrees_with_nearly_every_run() -> None:
    words = verdicts(RIGHT, SEED)
    assert words.count("agrees") >= 22
    assert "disagrees" not in words


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_version_is_ruled_out_by_some_runs_though_not_by_all(name: str) -> None:
    outcome = fitted(name, SEED)
    assert outcome.status == "converged"
    words = verdicts(name, SEED)
    assert 5 <= words.count("disagrees") < len(words)
    difference = compare({RIGHT: fitted(RIGHT, SEED), name: outcome}).differences[name]
    assert difference is not None and difference > 10


@pytest.mark.slow
@pytest.mark.timeout(900)
def test_the_joint_region_covers_the_truth_in_17_of_20_seeds() -> None:
    """With a true coverage of 0.95 fewer than 17 of 20 happen once in 63 times (binomial)."""
    inside = 0
    for seed in SEEDS:
        outcome = fitted(RIGHT, seed)
        assert outcome.status == "converged", f"seed {seed}: {outcome.message}"
        distance, count = distance_from_truth(outcome)
        inside += distance <= chi2.ppf(0.95, count)
    assert inside >= 17


@pytest.mark.slow
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_version_is_ruled_out_with_every_seed(name: str) -> None:
    for seed in SEEDS:
        difference = compare({RIGHT: fitted(RIGHT, seed), name: fitted(name, seed)}).differences[name]
        assert difference is not None and difference > 10, f"seed {seed}"
        assert "disagrees" in verdicts(name, seed), f"seed {seed}"
