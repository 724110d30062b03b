"""Large fits: one decomposition a point, in blocks, and heard of between them."""

import time

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting import objective as objective_module
from kinetics_db.engine.fitting.objective import Objective
from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Nuisance, Settings
from kinetics_db.engine.fitting.residuals import Data, Model

NETWORK = parse_mechanism("A --k--> B")
LONGEST_SILENCE = 5.0  # s of one core, well below the 30 s after which a background job counts as lost


def runs(count, points):
    rng = np.random.default_rng(7)
    times = np.linspace(0.0, 400.0, points)
    found = []
    for i in range(count):
        clean = np.exp(-0.01 * times)
        values = np.stack([clean, 1 - clean], axis=1) + 0.01 * rng.normal(size=(points, 2))
        charges = (Charge("A", 1.0, (f"w{i}",)),)
        found.append(Experiment(f"r{i}", charges, times, ("A", "B"), values, np.full((points, 2), 0.01)))
    return found, [Nuisance(f"w{i}", f"r{i}", 0.01) for i in range(count)]


def evaluated(settings):
    experiments, nuisances = runs(3, 50)
    parameters = ParameterMap(NETWORK, experiments, [Constant("k", 0.02, "own per run")], (), nuisances)
    model = Model(
        NETWORK, experiments, parameters, settings, deadline=time.monotonic() + 100, should_stop=None
    )
    objective = Objective(Data(experiments, settings), parameters)
    return objective, objective.point(model.evaluate(parameters.start))


@pytest.mark.parametrize("error_model", ["as tabulated", "one sigma", "one sigma per observable"])
def test_the_reduced_problem_has_the_sums_of_the_whole_one_at_any_sigmas(error_model, monkeypatch):
    monkeypatch.setattr(objective_module, "FEWEST_ROWS", 16)
    monkeypatch.setattr(objective_module, "ROWS_PER_COLUMN", 1)
    objective, point = evaluated(Settings(error_model=error_model))
    for factor in (1.0, 3.0):
        sigmas = point.sigmas * factor ** np.arange(len(point.sigmas))
        residuals, jacobian = objective.standardised(point, sigmas)
        few_residuals, few_jacobian = objective.reduced(point, sigmas)
        assert len(few_residuals) <= len(objective.parameters) + 1
        size = np.linalg.norm(jacobian) ** 2
        np.testing.assert_allclose(few_jacobian.T @ few_jacobian, jacobian.T @ jacobian, atol=1e-12 * size)
        np.testing.assert_allclose(few_residuals @ few_residuals, residuals @ residuals)
        np.testing.assert_allclose(
            few_jacobian.T @ few_residuals,
            jacobian.T @ residuals,
            atol=1e-12 * np.linalg.norm(jacobian) * np.linalg.norm(residuals),
        )


def test_a_point_is_decomposed_once_whatever_the_sigmas(monkeypatch):
    objective, point = evaluated(Settings(error_model="one sigma per observable"))
    told = []
    first = objective.triangles(point, lambda: told.append(None))
    blocks = len(told)
    assert blocks == 2
    objective.reduced(point, 2.0 * point.sigmas, lambda: told.append(None))
    assert len(told) == blocks
    assert objective.triangles(point) is first


def test_somebody_is_asked_after_each_block_of_a_decomposition(monkeypatch):
    monkeypatch.setattr(objective_module, "FEWEST_ROWS", 16)
    monkeypatch.setattr(objective_module, "ROWS_PER_COLUMN", 1)
    objective, point = evaluated(Settings())
    told = []
    objective.triangles(point, lambda: told.append(None))
    assert len(told) == np.ceil(300 / 16)


def test_a_fit_decomposes_no_more_often_than_it_evaluates(monkeypatch):
    found = []
    whole = objective_module._triangle

    def counted(*arguments):
        found.append(None)
        return whole(*arguments)

    monkeypatch.setattr(objective_module, "_triangle", counted)
    experiments, nuisances = runs(3, 50)
    fit = fit_globally(NETWORK, experiments, [Constant("k", 0.1)], nuisances=nuisances)
    assert fit.status == "converged", fit.message
    assert 1 < len(found) <= fit.evaluations


def test_a_stop_between_decompositions_keeps_the_best_point():
    """Asked once an experiment and once or twice a decomposition; the stop falls into the latter."""
    experiments, nuisances = runs(1, 50)
    for last in range(2, 8):
        asked = []

        def stop(asked=asked, last=last):
            asked.append(None)
            return len(asked) == last

        fit = fit_globally(NETWORK, experiments, [Constant("k", 0.1)], nuisances=nuisances, should_stop=stop)
        assert fit.status == "stopped"
        assert np.isfinite(fit.cost) and len(fit.parameters) == 2


def test_a_point_does_not_keep_the_tables_that_its_jacobian_was_made_of():
    _, point = evaluated(Settings())
    assert point.evaluation.jacobian == ()
    assert point.jacobian.shape == (300, 6)


@pytest.mark.slow
@pytest.mark.timeout(600)
@pytest.mark.parametrize(("count", "points"), [(70, 450), (300, 35)])
def test_the_largest_fits_are_heard_of_every_few_seconds(count, points):
    """About a hundred thousand values by 140 parameters, and 21 thousand by 600."""
    experiments, nuisances = runs(count, points)
    heard = [time.process_time()]

    def stop():
        heard.append(time.process_time())
        return False

    fit = fit_globally(
        NETWORK,
        experiments,
        [Constant("k", 0.02, "own per run")],
        nuisances=nuisances,
        should_stop=stop,
    )
    heard.append(time.process_time())
    assert fit.status == "converged", fit.message
    assert max(np.diff(heard)) < LONGEST_SILENCE
