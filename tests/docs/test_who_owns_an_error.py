"""The numbers of the page on shared causes: 36 runs on one standard, or each on its own."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.outcome import FitOutcome
from kinetics_db.engine.fitting.problem import (
    Charge,
    Constant,
    Experiment,
    Nuisance,
    Settings,
    StartConcentration,
)

RUNS = 36
OF_STANDARD = 0.02


def fitted(owner_of_run: Callable[[int], str]) -> FitOutcome:
    """2 A -> B, whose constant scales with the inverse of the concentrations; nobody knows the charges."""
    times = np.linspace(60.0, 1800.0, 8)
    noise = np.random.default_rng(1)
    experiments = []
    for run in range(RUNS):
        exact = 0.1 / (1.0 + 2.0 * 0.02 * 0.1 * times)
        experiments.append(
            Experiment(
                name=str(run),
                charges=(Charge("A", 0.1),),
                times=times,
                observed=("A",),
                values=(exact + noise.normal(0.0, 1e-4, times.size))[:, None],
                sigma=np.full((times.size, 1), 1e-4),
                signal_factors={"A": (owner_of_run(run),)},
            )
        )
    owners = dict.fromkeys(owner_of_run(run) for run in range(RUNS))
    return fit_globally(
        parse_mechanism("2 A --k--> B"),
        experiments,
        [Constant("k", start=0.01)],
        start_concentrations=[StartConcentration("A", start=0.1)],
        nuisances=[Nuisance(owner, owner, OF_STANDARD) for owner in owners],
        settings=Settings(),
    )


def relative_error(outcome: FitOutcome) -> float:
    k = outcome.parameter("k")
    assert k.standard_error is not None
    return k.standard_error / k.value


def test_36_runs_on_one_standard_leave_its_whole_error_in_the_constant() -> None:
    outcome = fitted(lambda run: "standard")
    assert outcome.status == "converged"
    assert outcome.parameter("standard").set_by_prior
    assert relative_error(outcome) == pytest.approx(OF_STANDARD, rel=0.02)


def test_36_standards_of_their_own_would_make_the_constant_six_times_better_known() -> None:
    outcome = fitted(lambda run: f"standard {run}")
    assert outcome.status == "converged"
    assert relative_error(outcome) == pytest.approx(OF_STANDARD / 6.0, rel=0.05)
