"""Thermal isomerisation of alpha-pinene at 189.5 degC, in percent of the charge.

Measured by Fuguitt & Hawkins (J. Am. Chem. Soc. 69 (1947) 319); the model and its discussion: Box, Hunter,
MacGregor, Erjavec, Technometrics 15 (1973) 33. Constants are per minute, times in minutes. The optimum of the
unweighted sum was recomputed outside this project with matrix exponentials.
"""

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Settings

NETWORK = parse_mechanism(
    """
    pinene --k_1--> dipentene
    pinene --k_2--> ocimene
    ocimene --k_3--> pyronene
    ocimene <--k_4 / k_5--> dimer
    """
)
TABLE = np.array(
    [
        [1230.0, 88.35, 7.3, 2.3, 0.4, 1.75],
        [3060.0, 76.4, 15.6, 4.5, 0.7, 2.8],
        [4920.0, 65.1, 23.1, 5.3, 1.1, 5.8],
        [7800.0, 50.4, 32.9, 6.0, 1.5, 9.3],
        [10680.0, 37.5, 42.7, 6.0, 1.9, 12.0],
        [15030.0, 25.9, 49.1, 5.9, 2.2, 17.0],
        [22620.0, 14.0, 57.4, 5.1, 2.6, 21.0],
        [36420.0, 4.5, 63.1, 3.8, 2.9, 25.7],
    ]
)


@pytest.mark.parametrize("start", [1e-5, 1e-4])
def test_five_constants_reach_the_published_optimum(start):
    observed = ("pinene", "dipentene", "ocimene", "pyronene", "dimer")
    experiment = Experiment("189.5 degC", (Charge("pinene", 100.0),), TABLE[:, 0], observed, TABLE[:, 1:])
    fit = fit_globally(
        NETWORK,
        [experiment],
        [Constant(f"k_{i}", start) for i in range(1, 6)],
        settings=Settings(error_model="one sigma"),
    )
    assert fit.status == "converged", fit.message
    np.testing.assert_allclose(fit.residual_sum_of_squares, 19.87217, rtol=1e-4)
    values = [fit.parameter(f"k_{i}").value for i in range(1, 6)]
    np.testing.assert_allclose(values, np.array([5.926, 2.963, 2.047, 27.45, 3.998]) * 1e-5, rtol=1e-3)
    errors = [fit.parameter(f"k_{i}").standard_error for i in range(1, 6)]
    expected = np.array([0.0507116535, 0.0491111906, 0.309503995, 2.32065559, 0.838395050]) * 1e-5
    np.testing.assert_allclose(errors, expected, rtol=1e-4)
    assert fit.n_points == 40
    np.testing.assert_allclose(fit.degrees_of_freedom, 35.0)
