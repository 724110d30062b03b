"""Smooth curves of a fit's model between its measured times."""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from django.core.cache import cache

from kinetics_db.datasets.services import Window, freeze_dataset
from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.problem import (
    Charge,
    Constant,
    Experiment,
    Nuisance,
    Settings,
    StartConcentration,
)
from kinetics_db.engine.fitting.residuals import ExperimentModel
from kinetics_db.engine.network import parse_mechanism
from kinetics_db.fits import curves as module
from kinetics_db.fits.curves import RunCurves, curves_of_fit
from kinetics_db.fits.models import FitResult
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.services import write_version
from tests.factories.flow import compute_now
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db


@pytest.fixture(autouse=True)
def _empty_cache() -> Iterator[None]:
    cache.clear()
    yield
    cache.clear()


def fitted(study: SmallStudy, **changes: Any) -> FitResult:
    values: dict[str, Any] = {
        "user": study.user,
        "dataset": study.dataset,
        "mechanism_version": study.version,
        "constants": [Constant("k", start=0.002)],
        **changes,
    }
    return compute_now(request_fit(**values))


def curves_of(result: FitResult, **more: Any) -> tuple[RunCurves, ...]:
    return curves_of_fit(fit=result.fit, result=result, **more)


def assert_through_stored(result: FitResult, curves: tuple[RunCurves, ...]) -> None:
    stored = result.content["experiments"]
    assert [c.name for c in curves] == [e["name"] for e in stored]
    for curve, kept in zip(curves, stored, strict=True):
        assert curve.smooth
        assert curve.observed_names == tuple(kept["observed_names"])
        model = np.array(kept["model"])
        at = np.searchsorted(curve.times, kept["times"])
        np.testing.assert_array_equal(curve.times[at], kept["times"])
        np.testing.assert_allclose(curve.values[at], model, rtol=1e-6, atol=1e-6 * np.abs(model).max())


def test_curves_go_through_the_stored_model_with_constants_of_single_runs() -> None:
    study = make_study(k=(0.01, 0.03))
    result = fitted(study, constants=[Constant("k", start=0.01, scope="own per run")])
    curves = curves_of(result)
    assert_through_stored(result, curves)
    assert [(c.run_id, c.table_id) for c in curves] == [(t.run_id, t.pk) for t in study.tables]


def test_curves_follow_held_constants_groups_and_weighings() -> None:
    study = make_study(k=(0.01, 0.03))
    version = write_version(
        user=study.user, project_id=study.project.pk, name="back", text="A <--k / k_b--> B"
    )
    group = Constant("k", start=0.01, scope="in a group", group_by="temperature")
    result = fitted(
        study, mechanism_version=version, constants=[group, Constant("k_b", start=1e-4, scope="held")]
    )
    pulls = [p["value"] for p in result.content["pulls"]]
    assert any(abs(value - 1.0) > 1e-4 for value in pulls), "the weighings must have been moved by the fit"
    assert_through_stored(result, curves_of(result))


def test_curves_begin_with_fitted_start_concentrations() -> None:
    result = fitted(make_study(), start_concentrations=[StartConcentration("A", start=0.02)])
    curves = curves_of(result)
    assert_through_stored(result, curves)
    start = {p["name"]: p["value"] for p in result.content["parameters"]}["[A]0 @ R-1"]
    assert curves[0].times[0] == 0.0
    assert curves[0].values[0, 0] == pytest.approx(start, rel=1e-9)


def test_between_measured_times_the_curve_is_the_models_own() -> None:
    result = fitted(make_study(), start_concentrations=[StartConcentration("A", start=0.02)])
    values = {p["name"]: p["value"] for p in result.content["parameters"]}
    curve = curves_of(result, points=200)[1]
    assert curve.times.size >= 200
    exact = values["[A]0 @ R-2"] * np.exp(-values["k"] * curve.times)
    np.testing.assert_allclose(curve.values[:, 0], exact, rtol=1e-6)


def test_a_curve_begins_at_the_runs_start_although_the_window_begins_later() -> None:
    study = make_study()
    ids = [table.pk for table in study.tables]
    late = freeze_dataset(
        user=study.user,
        project_id=study.project.pk,
        name="late",
        table_ids=ids,
        windows={ids[0]: Window(start=50.0, end=200.0)},
    )
    result = fitted(study, dataset=late)
    curves = curves_of(result)
    assert_through_stored(result, curves)
    assert curves[0].times[0] == 0.0
    assert curves[0].times[-1] <= 200.0 < curves[1].times[-1]


def test_shifted_clocks_and_signal_factors_move_the_curve_as_they_move_the_fit() -> None:
    network = parse_mechanism("A --k--> B")
    times = np.linspace(0.0, 300.0, 7)
    experiment = Experiment(
        name="R-1",
        charges=(Charge("A", 0.01, ("flask",)),),
        times=times,
        observed=("A", "B"),
        values=np.ones((7, 2)),
        signal_factors={"B": ("standard",)},
        time_shift="clock",
    )
    nuisances = [
        Nuisance("flask", "flask", 0.01),
        Nuisance("standard", "standard", 0.02),
        Nuisance("clock", "run R-1", 5.0, "time shift"),
    ]
    parameters = ParameterMap(network, [experiment], [Constant("k", start=0.01)], [], nuisances)
    model = ExperimentModel(network, experiment, parameters.locals[0], parameters)
    settings = Settings()
    for shift in (7.0, -7.0):
        point = {"k": 0.012, "flask": 1.02, "standard": 0.97, "clock": shift}
        values = np.array([point[p.name] for p in parameters.parameters])
        evaluated = model.evaluate(values, settings, 5.0)
        assert not isinstance(evaluated, str)
        curve = model.curve(values, times, settings, 5.0)
        np.testing.assert_allclose(curve, evaluated[0], rtol=1e-6, atol=1e-9)


def test_a_result_that_cannot_start_has_no_curves() -> None:
    study = make_study()
    version = write_version(
        user=study.user, project_id=study.project.pk, name="explosion", text="2 A --k--> 3 A + B"
    )
    result = fitted(study, mechanism_version=version, constants=[Constant("k", start=1e6)])
    assert result.status == "cannot start"
    assert curves_of(result) == ()


def test_where_the_integration_fails_the_stored_values_are_given(monkeypatch: pytest.MonkeyPatch) -> None:
    result = fitted(make_study())
    monkeypatch.setattr(module, "SECONDS_A_RUN", -1.0)
    for curve, kept in zip(curves_of(result), result.content["experiments"], strict=True):
        assert not curve.smooth
        assert curve.times.tolist() == kept["times"]
        assert curve.values.tolist() == kept["model"]


def test_where_an_engine_computes_otherwise_the_stored_values_are_given(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    result = fitted(make_study())
    honest = ExperimentModel.curve
    monkeypatch.setattr(ExperimentModel, "curve", lambda *given: honest(*given) * 1.001)
    curves = curves_of(result)
    assert not any(curve.smooth for curve in curves)
    assert curves[0].values.tolist() == result.content["experiments"][0]["model"]


def test_curves_are_computed_once(monkeypatch: pytest.MonkeyPatch) -> None:
    result = fitted(make_study())
    first = curves_of(result)
    monkeypatch.delattr(ExperimentModel, "curve")
    again = curves_of(result)
    assert [c.name for c in again] == [c.name for c in first]
    np.testing.assert_array_equal(again[0].values, first[0].values)


def test_only_the_newest_curves_are_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "MOST_KEPT", 2)
    result = fitted(make_study())
    for points in (20, 30, 40):
        curves_of(result, points=points)
    keys = cache.get(module.KEPT)
    assert [key.rpartition("/")[2] for key in keys] == ["30", "40"]
    assert all(cache.get(key) is not None for key in keys)
    assert cache.get(keys[0].replace("/30", "/20")) is None


def test_a_cache_that_is_away_costs_time_only(monkeypatch: pytest.MonkeyPatch) -> None:
    result = fitted(make_study())

    def away(*args: object, **more: object) -> None:
        raise ConnectionError("no answer")

    monkeypatch.setattr(module.cache, "get", away, raising=False)
    assert_through_stored(result, curves_of(result))


def test_thirty_five_runs_take_less_than_a_second() -> None:
    study = make_study(starts=tuple(float(5 + i) for i in range(35)), text="A --k--> C\nC --k_2--> B")
    result = fitted(
        study,
        constants=[Constant("k", start=0.009), Constant("k_2", start=1.0, scope="held")],
        settings=Settings(max_iterations=3),
    )
    begun = time.process_time()
    curves = curves_of(result)
    taken = time.process_time() - begun
    assert len(curves) == 35 and all(curve.smooth for curve in curves)
    assert taken < 1.0
