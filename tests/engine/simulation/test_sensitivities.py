"""Exact sensitivities against closed forms and against a second code.

The second code integrates the same equations in complex arithmetic with a fixed-step method and reads the
derivative from an imaginary perturbation (complex step: Squire & Trapp, SIAM Rev. 40 (1998) 110), which has no
subtraction error.
"""

import numpy as np
import pytest

from kinetics_db.engine import Conditions, parse_mechanism, simulate

CATALYSIS = """
Cat + S <--k_f / k_b--> Int
Int + Nu --k_p--> P + Cat
2 Int --k_d--> D
S + W --{ k_h*[S]*[W]/(1 + K*[P]) }--> Q + W
"""
CONSTANTS = {"k_f": 3.0, "k_b": 0.2, "k_p": 1.5, "k_d": 0.4, "k_h": 0.05, "K": 2.0}
START = {"Cat": 0.1, "S": 1.0, "Nu": 0.8, "W": 0.5}


def catalysis(y, k):
    cat, s, i, nu, p, _, w = y
    forward, back = k["k_f"] * cat * s, k["k_b"] * i
    product, dimer = k["k_p"] * i * nu, k["k_d"] * i * i
    lost = k["k_h"] * s * w / (1 + k["K"] * p)
    return np.array(
        [
            -forward + back + product,
            -forward + back - lost,
            forward - back - product - 2 * dimer,
            -product,
            product,
            dimer,
            0 * w,
            lost,
        ]
    )


def complex_step(name, times, steps_per_unit=400):
    """Derivative of all species to one parameter by classical Runge-Kutta in complex arithmetic."""
    tiny = 1e-30
    k = {n: complex(v) for n, v in CONSTANTS.items()}
    y = np.array([0.1, 1.0, 0, 0.8, 0, 0, 0.5, 0], dtype=complex)
    if name in k:
        k[name] += 1j * tiny
    else:
        y[["Cat", "S", "Int", "Nu", "P", "D", "W"].index(name[1:-2])] += 1j * tiny
    rows, t = [], 0.0
    for end in times:
        n = max(1, int(np.ceil((end - t) * steps_per_unit)))
        h = (end - t) / n
        for _ in range(n):
            k1 = catalysis(y[:7], k)
            k2 = catalysis((y + h / 2 * k1)[:7], k)
            k3 = catalysis((y + h / 2 * k2)[:7], k)
            k4 = catalysis((y + h * k3)[:7], k)
            y = y + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        rows.append(y.imag / tiny)
        t = end
    return np.array(rows)


@pytest.mark.parametrize("parameter", [*CONSTANTS, "[S]0", "[Cat]0", "[Nu]0", "[W]0"])
def test_sensitivities_agree_with_a_second_code_in_complex_arithmetic(parameter):
    network = parse_mechanism(CATALYSIS)
    times = [0.5, 2.0, 8.0]
    curves = simulate(
        network, constants=CONSTANTS, start=START, times=times, sensitivities_to=(parameter,), rtol=1e-10
    )
    assert curves.outcome.ok, curves.outcome.message
    expected = complex_step(parameter, times)
    size = np.abs(expected).max()
    for column, species in enumerate(["Cat", "S", "Int", "Nu", "P", "D", "W", "Q"]):
        found = curves.sensitivity_of(species)[:, 0]
        np.testing.assert_allclose(found, expected[:, column], rtol=1e-6, atol=1e-7 * size, err_msg=species)


def test_first_order_sensitivities_follow_the_closed_form():
    times = np.array([0.0, 1.0, 10.0, 40.0])
    curves = simulate(
        parse_mechanism("A --k--> P"),
        constants={"k": 0.1},
        start={"A": 2.0},
        times=times,
        sensitivities_to=("[A]0", "k"),
    )
    decay = np.exp(-0.1 * times)
    np.testing.assert_allclose(
        curves.sensitivity_of("A"), np.stack([decay, -2 * times * decay], 1), rtol=2e-6
    )
    assert curves.parameters == ("[A]0", "k")


def test_asking_for_sensitivities_does_not_move_the_curves():
    network = parse_mechanism(CATALYSIS)
    ask = {"constants": CONSTANTS, "start": START, "times": np.linspace(0, 10, 11)}
    bare = simulate(network, **ask)
    full = simulate(network, **ask, sensitivities_to=tuple(CONSTANTS))
    np.testing.assert_allclose(full.values, bare.values, rtol=1e-6, atol=1e-9)
    assert bare.sensitivities.shape == (11, 8, 0)


def test_sensitivities_to_a_computed_constant_reach_the_free_ones_by_the_chain_rule():
    """With k_b = k_f/K the sensitivity to K is -k_f/K^2 times that to k_b, and k_f gains a second path."""
    times = [0.5, 2.0, 5.0]
    tied = simulate(
        parse_mechanism("A <--k_f / k_b--> B\nwhere k_b = k_f / K"),
        constants={"k_f": 0.6, "K": 3.0},
        start={"A": 1.0},
        times=times,
        sensitivities_to=("k_f", "K"),
    )
    free = simulate(
        parse_mechanism("A <--k_f / k_b--> B"),
        constants={"k_f": 0.6, "k_b": 0.2},
        start={"A": 1.0},
        times=times,
        sensitivities_to=("k_f", "k_b"),
    )
    to_forward, to_back = free.sensitivity_of("B").T
    np.testing.assert_allclose(tied.sensitivity_of("B")[:, 0], to_forward + to_back / 3.0, rtol=1e-5)
    np.testing.assert_allclose(tied.sensitivity_of("B")[:, 1], to_back * (-0.6 / 9.0), rtol=1e-5)


def test_computed_constants_may_use_the_temperature_of_the_run():
    network = parse_mechanism("A --k--> P\nwhere k = A_k*exp(-E/(8.314462618*T))")
    rate = 1e6 * np.exp(-50e3 / (8.314462618 * 300.0))
    curves = simulate(
        network,
        constants={"A_k": 1e6, "E": 50e3},
        start={"A": 1.0},
        times=[100.0],
        conditions=Conditions(temperature=300.0),
        sensitivities_to=("E",),
    )
    expected = np.exp(-rate * 100.0)
    np.testing.assert_allclose(curves.of("A"), expected, rtol=1e-6)
    slope = 100.0 * rate / (8.314462618 * 300.0) * expected
    np.testing.assert_allclose(curves.sensitivity_of("A")[0, 0], slope, rtol=1e-5)
