"""Curves at new conditions, with what the fitted constants do not know."""

from __future__ import annotations

import numpy as np
import pytest

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.errors import InvalidInput
from kinetics_db.fits.services import request_fit
from kinetics_db.predictions.models import Prediction
from kinetics_db.predictions.services import predict_run
from tests.factories.flow import compute_now
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db


def fitted(study: SmallStudy, **scope: str):  # type: ignore[no-untyped-def]
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=study.version,
        constants=[Constant("k", start=0.005, **scope)],  # type: ignore[arg-type]
    )
    return compute_now(fit)


def test_a_prediction_is_the_closed_form_with_its_propagated_uncertainty() -> None:
    study = make_study()
    result = fitted(study)
    k = result.constants.get(name="k")
    times = [0.0, 50.0, 100.0]
    content = predict_run(user=study.user, result=result, start={"A": 0.015}, times=times).content
    expected = 0.015 * np.exp(-k.value * np.array(times))
    at = content["species"].index("A")
    np.testing.assert_allclose(np.array(content["values"])[:, at], expected, rtol=1e-6)
    # first order: u([A]) = t [A] u(k)
    np.testing.assert_allclose(
        np.array(content["standard_uncertainty"])[:, at],
        np.array(times) * expected * k.standard_error,
        rtol=1e-4,
    )
    assert content["outside"] == [] and "kinetic estimate" in content["caution"]


def test_conditions_outside_the_fitted_runs_are_marked() -> None:
    study = make_study()
    made = predict_run(
        user=study.user, result=fitted(study), start={"A": 0.1}, times=[0.0, 1.0], temperature=400.0
    )
    assert made.extrapolated
    assert any("[A]0" in said for said in made.content["outside"])
    assert any("400 K" in said for said in made.content["outside"])


def test_where_constants_differ_a_place_has_to_be_named() -> None:
    study = make_study(k=(0.01, 0.03))
    result = fitted(study, scope="own per run")
    with pytest.raises(InvalidInput, match="R-1, R-2"):
        predict_run(user=study.user, result=result, start={"A": 0.01}, times=[0.0, 10.0])
    fast = predict_run(
        user=study.user, result=result, start={"A": 0.01}, times=[0.0, 10.0], place="R-2"
    ).content
    at = fast["species"].index("A")
    assert fast["values"][1][at] == pytest.approx(0.01 * np.exp(-0.3), rel=0.01)


def test_the_same_prediction_is_kept_once() -> None:
    study = make_study()
    result = fitted(study)
    first = predict_run(user=study.user, result=result, start={"A": 0.01}, times=[0.0, 1.0])
    assert predict_run(user=study.user, result=result, start={"A": 0.01}, times=[0.0, 1.0]).pk == first.pk
    assert Prediction.objects.count() == 1


@pytest.mark.parametrize(
    "changes",
    [
        {"start": {"Q": 1.0}},
        {"start": {"A": -1.0}},
        {"times": [5.0, 1.0]},
        {"times": []},
        {"start": {"A": "1"}},
        {"place": "nowhere"},
        {"times": [1.0] * 6000},
    ],
)
def test_impossible_conditions_are_refused(changes: dict[str, object]) -> None:
    study = make_study()
    values: dict[str, object] = {"start": {"A": 0.01}, "times": [0.0, 1.0], **changes}
    with pytest.raises(InvalidInput):
        predict_run(user=study.user, result=fitted(study), **values)  # type: ignore[arg-type]
    assert not Prediction.objects.exists()
