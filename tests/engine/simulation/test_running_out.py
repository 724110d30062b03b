"""Orders below one, whose species runs out at a finite time, against their integrated rate laws.

d[A]/dt = -k [A]^n gives [A]^(1-n) = [A]0^(1-n) - (1-n) k t until that is zero, and [A] = 0 after it (textbook).
"""

import math

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism, simulate
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment
from kinetics_db.engine.network.expressions import derivative, evaluate, parse_expression
from kinetics_db.engine.network.syntax import Concentration, Parameter
from kinetics_db.engine.simulation.equations import equations_of
from kinetics_db.engine.simulation.powers import power, root, root_by_exponent, slope_of_root
from kinetics_db.engine.simulation.tape import Tape


def closed_form(n, k, a0, t):
    """[A] and its derivatives to k, n and [A]0, each of shape (times,)."""
    q = np.maximum(a0 ** (1 - n) - (1 - n) * k * t, 0.0)
    there = q > 0
    inside = np.where(there, q, 1.0)
    a = q ** (1 / (1 - n))
    rate = q ** (n / (1 - n)) * there
    to_n = np.log(inside) / (1 - n) ** 2 + (k * t - a0 ** (1 - n) * np.log(a0)) / inside / (1 - n)
    return a, -t * rate, a * to_n, a0**-n * rate


@pytest.mark.parametrize("a0", [1.0, 1e-3, 50.0])
@pytest.mark.parametrize("n", [0.5, 0.3, 0.1, 0.01, 1e-3])
def test_a_species_consumed_in_an_order_below_one_runs_out_as_the_closed_form_says(n, a0):
    """With n = 0.001 this is all but zero order. Times run from the start to ten times the end."""
    k = 0.1 * a0 ** (1 - n)
    end = 10.0 / (1 - n)
    times = end * np.array([0.0, 0.1, 0.5, 0.9, 0.99, 0.9999, 1.0001, 1.01, 1.5, 10.0])
    curves = simulate(
        parse_mechanism("A --{ k*[A]^n }--> B"),
        constants={"k": k, "n": n},
        start={"A": a0},
        times=times,
        sensitivities_to=("k", "n", "[A]0"),
    )
    assert curves.outcome.ok, curves.outcome.message
    assert curves.outcome.steps < 2000
    a, *slopes = closed_form(n, k, a0, times)
    np.testing.assert_allclose(curves.of("A"), a, rtol=1e-6, atol=1e-8 * a0)
    np.testing.assert_allclose(curves.of("B"), a0 - a, rtol=1e-6, atol=1e-8 * a0)
    for column, expected in enumerate(slopes):
        found = curves.sensitivity_of("A")[:, column]
        np.testing.assert_allclose(found, expected, rtol=1e-5, atol=2e-6 * np.abs(expected).max())
    assert (np.abs(curves.of("A")[times > end]) < 1e-12 * a0).all()


@pytest.mark.parametrize(
    ("text", "k"),
    [
        ("0.5 A --k--> 0.5 B", 0.02),
        ("A --{ k*sqrt([A]) }--> B", 0.01),
        ("A --{ k*[A]^0.5 }--> B", 0.01),
        ("A --{ sqrt(k*k*[A]) }--> B", 0.01),
        ("A + C --{ k*sqrt([A]*[C]/2) }--> B + C\nhold C", 0.01),
    ],
)
def test_half_order_runs_out_in_mass_action_and_in_every_way_to_write_it(text, k):
    times = np.array([0.0, 50.0, 150.0, 199.0, 201.0, 400.0, 2000.0])
    curves = simulate(
        parse_mechanism(text),
        constants={"k": k},
        start={"A": 1.0, "C": 2.0} if "C" in text else {"A": 1.0},
        times=times,
        sensitivities_to=("k",),
    )
    assert curves.outcome.ok, curves.outcome.message
    root_of_a = np.maximum(1.0 - 0.005 * times, 0.0)
    np.testing.assert_allclose(curves.of("A"), root_of_a**2, rtol=1e-6, atol=1e-12)
    expected = -2.0 * root_of_a * 0.005 * times / k
    np.testing.assert_allclose(curves.sensitivity_of("A")[:, 0], expected, rtol=1e-6, atol=1e-7 / k)


@pytest.mark.parametrize(("text", "k"), [("0.5 A --k--> B", 0.02), ("A --{ k*sqrt([A]) }--> B", 0.01)])
def test_a_half_order_run_with_a_tail_of_zeros_is_fitted(text, k):
    times = np.linspace(0.0, 400.0, 41)
    values = np.maximum(1.0 - 0.005 * times, 0.0)[:, None] ** 2
    run = Experiment("r", (Charge("A", 1.0),), times, ("A",), values, np.full(values.shape, 0.01))
    fit = fit_globally(parse_mechanism(text), [run], [Constant("k", 1.3 * k)])
    assert fit.status == "converged", fit.message
    assert fit.parameter("k").value == pytest.approx(k, rel=1e-6)


def test_a_trace_above_the_blur_keeps_its_root_to_the_last_digit():
    """1e-12 mol/L of R in 55 mol/L of solvent W: 2e-14 of the largest concentration."""
    curves = simulate(
        parse_mechanism("A + 0.5 R --k--> B + 0.5 R\nA --{ q*[A]*sqrt([R]) }--> B\nW --w--> V"),
        constants={"k": 1e4, "q": 1e4, "w": 1e-9},
        start={"A": 1.0, "R": 1e-12, "W": 55.0},
        times=[20.0, 100.0],
    )
    np.testing.assert_allclose(curves.of("A"), np.exp([-0.4, -2.0]), rtol=1e-7)


def test_an_order_above_one_keeps_its_slope_where_rounding_leaves_a_concentration_below_zero():
    network = parse_mechanism("1.5 A --k--> B\nA --{ q*[A]^1.5 }--> B")
    bound = equations_of(network).bind(np.array([2.0, 2.0]))
    for a in (-1e-4, 1e-4):
        h = 1e-9
        above, below = (bound.rates(np.array([a + s * h, 0.0])).copy() for s in (1, -1))
        found = bound.jacobian_transposed(np.array([a, 0.0]))[0]
        np.testing.assert_allclose(found, (above - below) / (2 * h), rtol=1e-6)
        assert found[0] < 0


@pytest.mark.parametrize("n", [0.01, 0.3, 0.5, 0.9])
def test_a_root_is_continued_with_value_and_slope_from_the_width_on(n):
    width = 1e-14
    assert root(width, n, width) == power(width, n)
    just_inside = width * (1 - 1e-12)
    assert root(just_inside, n, width) == pytest.approx(power(just_inside, n), rel=1e-12)
    assert slope_of_root(just_inside, n, width) == pytest.approx(power(width, n - 1), rel=1e-7)
    assert root(0.0, n, width) == 0.0
    assert 0.0 < slope_of_root(0.0, n, width) < math.inf
    assert root(-0.3 * width, n, width) == -root(0.3 * width, n, width)
    inside = np.linspace(-1.2, 1.2, 49) * width
    values = [root(x, n, width) for x in inside]
    assert (np.diff(values) > 0).all()
    assert max(abs(v - power(x, n)) for v, x in zip(values, inside, strict=True)) < width**n
    assert root(3.0 * width, n, width) == power(3.0 * width, n)


@pytest.mark.parametrize("x", [-1.5, -0.7, -0.1, 0.1, 0.7, 1.5])
@pytest.mark.parametrize("n", [0.2, 0.5, 0.8, 1.5])
def test_slopes_of_a_root_are_those_of_its_values(x, n):
    h = 1e-6
    assert n * slope_of_root(x, n) == pytest.approx((root(x + h, n) - root(x - h, n)) / (2 * h), rel=1e-7)
    assert root_by_exponent(x, n) == pytest.approx((root(x, n + h) - root(x, n - h)) / (2 * h), rel=1e-7)


@pytest.mark.parametrize(
    "text", ["k*sqrt([A]*[B])", "k*[A]^n/([B]+k)", "sqrt(k*[A]^n + [B])", "([A]^0.3)^0.7"]
)
@pytest.mark.parametrize("level", [1.0, 0.4])
def test_derivatives_on_the_tape_are_those_of_the_values_within_the_width_too(text, level):
    """At the level of 0.4 of the width and at the width, which is one for every base here."""
    tape = Tape([parse_expression(text)], species=("A", "B"), names=("k", "n"))
    widths = [2.0] * len(tape.roots)
    point = [0.9 * level, 0.5 * level, 0.7, 0.6]

    def values(inputs):
        return tape.run([*inputs, math.nan, *widths], derivatives=True)

    positions = [i for _, i in tape.species_entries] + [2 + i for _, i in tape.name_entries]
    h = 1e-6
    for found, i in zip(values(point)[1:], positions, strict=True):
        above, below = list(point), list(point)
        above[i] += h
        below[i] -= h
        assert found == pytest.approx((values(above)[0] - values(below)[0]) / (2 * h), rel=1e-7), (text, i)


@pytest.mark.parametrize(
    "text",
    [
        "-k*[A]*[B]/(1 + n*[A])^2",
        "exp(-k*[A])*log(1 + [B]/n) - [A]/[B]/k",
        "([A] - [B])^3 + [B]^-n + 2^[A]",
        "sqrt(1 + k*[A]^1.5)*n^k - -[A]",
        "T*k/(k - [A])*[A]^n",
        "3 + 0*[A]",
    ],
)
def test_derivatives_on_the_tape_are_those_of_symbolic_differentiation(text):
    expression = parse_expression(text)
    tape = Tape([expression], species=("A", "B"), names=("k", "n"))
    numbers = {"A": 0.8, "B": 0.5, "k": 0.3, "n": 1.7}
    widths = [1e-12] * len(tape.roots)
    result = tape.run([0.8, 0.5, 0.3, 1.7, 310.0, *widths], derivatives=True)

    def number(e):
        constants = {name: numbers[name] for name in "kn"}
        concentrations = {s: numbers[s] for s in "AB"}
        return float(evaluate(e, parameters=constants, concentrations=concentrations, temperature=310.0))

    assert result[0] == pytest.approx(number(expression), rel=1e-13)
    variables = [Concentration("AB"[i]) for _, i in tape.species_entries]
    variables += [Parameter("kn"[i]) for _, i in tape.name_entries]
    for found, variable in zip(result[1:], variables, strict=True):
        assert found == pytest.approx(number(derivative(expression, variable)), rel=1e-12, abs=1e-14), (
            variable
        )


def test_a_root_of_an_undefined_base_takes_the_smallest_width():
    tape = Tape([parse_expression("sqrt(log([A] - 5))")], species=("A",), names=())
    assert tape.widths([1.0], [math.nan], [1e-15]) == [1e-30]
    assert Tape([parse_expression("sqrt(3*[A])")], species=("A",), names=()).widths(
        [1.0], [math.nan], [1e-15]
    ) == pytest.approx([3e-15])
