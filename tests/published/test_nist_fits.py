"""Certified nonlinear regressions of the NIST Statistical Reference Datasets (StRD), posed as mechanism fits.

BoxBOD and Misra1a are y = b1 (1 - exp(-b2 x)): S turns into P at first order, P is observed, and the start
concentration of S is fitted. For Misra1a x is a pressure; here it stands for the time.
"""

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import Constant, Experiment, Settings, StartConcentration

FIRST_ORDER = parse_mechanism("S --k--> P")
DATASETS = {
    "BoxBOD": {
        "x": [1.0, 2.0, 3.0, 5.0, 7.0, 10.0],
        "y": [109.0, 149.0, 149.0, 191.0, 213.0, 224.0],
        "certified": (213.80940889, 12.354515176, 0.54723748542, 0.10455993237),
        "residual_sum": 1168.0088766,
        "residual_sd": 17.088072423,
        "starts": [(1.0, 1.0), (100.0, 0.75)],
    },
    "Misra1a": {
        "x": [
            77.6,
            114.9,
            141.1,
            190.8,
            239.9,
            289.0,
            332.8,
            378.4,
            434.8,
            477.3,
            536.8,
            593.1,
            689.1,
            760.0,
        ],
        "y": [
            10.07,
            14.73,
            17.94,
            23.93,
            29.61,
            35.18,
            40.02,
            44.82,
            50.76,
            55.05,
            61.01,
            66.40,
            75.47,
            81.78,
        ],
        "certified": (238.94212918, 2.7070075241, 0.00055015643181, 7.2668688436e-06),
        "residual_sum": 0.12455138894,
        "residual_sd": 0.1018787633,
        "starts": [(500.0, 0.0001), (250.0, 0.0005)],
    },
}


@pytest.mark.parametrize("start", [0, 1], ids=["first start", "second start"])
@pytest.mark.parametrize("name", DATASETS)
def test_a_mechanism_fit_reaches_the_certified_values_from_both_certified_starts(name, start):
    data = DATASETS[name]
    amount, rate = data["starts"][start]
    experiment = Experiment(name, (), np.array(data["x"]), ("P",), np.array(data["y"])[:, None])
    fit = fit_globally(
        FIRST_ORDER,
        [experiment],
        [Constant("k", rate)],
        start_concentrations=[StartConcentration("S", amount)],
        settings=Settings(error_model="one sigma"),
    )
    assert fit.status == "converged", fit.message
    amount_found, k = fit.parameter(f"[S]0 @ {name}"), fit.parameter("k")
    found = (amount_found.value, amount_found.standard_error, k.value, k.standard_error)
    np.testing.assert_allclose(found, data["certified"], rtol=1e-6)
    np.testing.assert_allclose(fit.residual_sum_of_squares, data["residual_sum"], rtol=1e-6)
    np.testing.assert_allclose(fit.sigmas[0].value, data["residual_sd"], rtol=1e-6)
    assert fit.quantile_kind == "Student's t"


def test_misra1d_is_second_order_in_what_is_left():
    """y = b1 b2 x/(1 + b2 x): the rate is k [S]^2 with k = b2/b1 (certified residual sum of Misra1d)."""
    data = DATASETS["Misra1a"]
    experiment = Experiment("Misra1d", (), np.array(data["x"]), ("P",), np.array(data["y"])[:, None])
    fit = fit_globally(
        parse_mechanism("S --{ k*[S]^2 }--> P"),
        [experiment],
        [Constant("k", 1e-6)],
        start_concentrations=[StartConcentration("S", 500.0)],
        settings=Settings(error_model="one sigma"),
    )
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.residual_sum_of_squares, 0.056419295283, rtol=1e-6)
    np.testing.assert_allclose(fit.parameter("[S]0 @ Misra1d").value, 437.36970754, rtol=1e-6)


def test_rat42_is_an_autocatalysis():
    """y = b1/(1 + exp(b2 - b3 x)), pasture regrowth: A + X to 2 X with k = b3/b1 and [A]0 + [X]0 = b1."""
    x = np.array([9.0, 14.0, 21.0, 28.0, 42.0, 57.0, 63.0, 70.0, 79.0])
    y = np.array([8.93, 10.8, 18.59, 22.33, 39.35, 56.11, 61.73, 64.62, 67.08])
    fit = fit_globally(
        parse_mechanism("A + X --k--> 2 X"),
        [Experiment("Rat42", (), x, ("X",), y[:, None])],
        [Constant("k", 1e-3)],
        start_concentrations=[StartConcentration("A", 60.0), StartConcentration("X", 4.0)],
        settings=Settings(error_model="one sigma"),
    )
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.residual_sum_of_squares, 8.0565229338, rtol=1e-6)
    total = fit.parameter("[A]0 @ Rat42").value + fit.parameter("[X]0 @ Rat42").value
    np.testing.assert_allclose(total, 72.462237576, rtol=1e-6)
    np.testing.assert_allclose(fit.parameter("k").value * total, 0.067359200066, rtol=1e-6)
