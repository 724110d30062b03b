"""Verdicts on very many points or runs come soon, and with signs of work on the way."""

import time

import numpy as np
import pytest

from kinetics_db.engine.fitting.outcome import ExperimentFit, FitOutcome, FittedParameter, NuisancePull
from kinetics_db.engine.run_evidence import evidence_of_runs


def outcome(runs, points, parameters, pulls=()):
    """A fit of one observable whose standardised residuals are normal and whose Jacobian is arbitrary."""
    rng = np.random.default_rng(11)
    times = np.arange(1.0, points + 1.0)
    experiments = []
    for i in range(runs):
        residuals = rng.normal(size=(points, 1))
        model = np.linspace(100.0, 0.0, points)[:, None]
        experiments.append(
            ExperimentFit(
                name=f"r{i}",
                times=times,
                observed_names=("A",),
                observed=model + residuals,
                model=model,
                residuals=residuals,
                sigma=np.ones((points, 1)),
                standardised=residuals,
                rows=np.arange(points),
                columns=np.zeros(points, dtype=np.intp),
                jacobian=rng.normal(size=(points, parameters)),
                nuisances=tuple(p.name for p in pulls if f"r{i}" in p.experiments),
                owner=f"r{i}",
            )
        )
    constants = tuple(
        FittedParameter(f"k_{j}", f"k_{j}", "constant", None, 1.0, 0.1, 0.9, 1.1, "logarithmic")
        for j in range(parameters)
    )
    return FitOutcome(
        "converged",
        "",
        n_points=runs * points,
        parameters=constants,
        prior_precision=np.zeros(parameters),
        covariance=np.eye(parameters),
        experiments=tuple(experiments),
        pulls=tuple(pulls),
    )


@pytest.mark.parametrize(("runs", "points"), [(1, 100_000), (5, 20_000)])
def test_a_hundred_thousand_points_are_judged_in_seconds_without_a_long_silence(runs, points):
    fit = outcome(runs, points, 60)
    told = [time.thread_time()]
    evidence = evidence_of_runs(fit, on_work=lambda: told.append(time.thread_time()))
    told.append(time.thread_time())
    assert told[-1] - told[0] < 5.0  # of the processor, about 0.5 s
    assert max(np.diff(told)) < 2.0
    assert len(told) > runs
    assert {run.verdict for run in evidence} == {"agrees"}
    freedom = sum(run.observables[0].degrees_of_freedom for run in evidence)
    assert freedom == pytest.approx(runs * points - 60)
    assert all(0.01 < run.observables[0].runs_p < 1.0 for run in evidence)


def test_each_of_a_thousand_runs_is_told_of_and_keeps_its_own_numbers():
    pulls = [NuisancePull(f"w{i}", f"r{i}", 1.0, 0.5, (f"r{i}",)) for i in range(1000)]
    fit = outcome(1000, 5, 2, pulls)
    told = []
    evidence = evidence_of_runs(fit, on_work=lambda: told.append(1))
    assert len(told) >= 1000
    for i, (run, e) in enumerate(zip(evidence, fit.experiments, strict=True)):
        assert run.experiment == e.name
        assert [p.name for p in run.pulls] == [f"w{i}"]
        assert run.observables[0].chi_square == pytest.approx(np.sum(e.standardised**2))
