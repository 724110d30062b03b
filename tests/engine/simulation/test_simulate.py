"""What a simulation keeps, refuses and bounds."""

import time

import numpy as np
import pytest

from kinetics_db.engine import Conditions, parse_mechanism, simulate
from kinetics_db.errors import InvalidInput


def test_the_point_at_zero_is_the_start_and_repeated_times_repeat():
    network = parse_mechanism("A --k--> B")
    curves = simulate(network, constants={"k": 1.0}, start={"A": 1.0}, times=[0.0, 0.0, 1.0, 1.0])
    assert curves.values[0].tolist() == [1.0, 0.0]
    assert curves.values[1].tolist() == [1.0, 0.0]
    assert curves.values[2].tolist() == curves.values[3].tolist()


def test_a_run_may_begin_at_another_time_than_zero():
    network = parse_mechanism("A --k--> B")
    curves = simulate(network, constants={"k": 1.0}, start={"A": 1.0}, times=[-2.0, -1.0], start_time=-2.0)
    np.testing.assert_allclose(curves.of("A"), [1.0, np.exp(-1.0)], rtol=1e-6)


@pytest.mark.parametrize(
    ("start_time", "first"),
    [
        (0.0, 5e-324),
        (0.0, 1e-300),
        (0.3, np.nextafter(0.3, 1.0)),
        (1.0, 1.0 + 2.2e-16),
        (-3.0, np.nextafter(-3.0, 0.0)),
        (100.0, 100.0 + 2e-14),
        (1.7e9, np.nextafter(1.7e9, 2e9)),
    ],
)
@pytest.mark.parametrize("wanted", [(), ("k",)])
def test_a_time_that_rounding_alone_parts_from_the_start_has_the_start_values(start_time, first, wanted):
    curves = simulate(
        parse_mechanism("A --k--> B"),
        constants={"k": 0.01},
        start={"A": 1.0},
        times=[first, first, start_time + 100.0],
        start_time=start_time,
        sensitivities_to=wanted,
    )
    assert curves.outcome.ok, curves.outcome.message
    np.testing.assert_allclose(curves.of("A"), [1.0, 1.0, np.exp(-1.0)], rtol=1e-6)
    assert curves.times[0] == first  # told as asked for
    if wanted:
        np.testing.assert_allclose(
            curves.sensitivity_of("A")[:, 0], [0.0, 0.0, -100.0 * np.exp(-1.0)], rtol=1e-6
        )


def test_a_time_shortly_after_the_start_is_a_step_of_its_own():
    """70 roundings of the time after it: enough to move, though not to resolve the decay."""
    curves = simulate(
        parse_mechanism("A --k--> B"),
        constants={"k": 1e12},
        start={"A": 1.0},
        times=[100.0 + 1e-12, 101.0],
        start_time=100.0,
    )
    np.testing.assert_allclose(curves.of("A")[0], np.exp(-1.0), rtol=0.1)


def test_no_times_give_empty_curves():
    curves = simulate(parse_mechanism("A --k--> B"), constants={"k": 1.0}, start={"A": 1.0}, times=[])
    assert curves.values.shape == (0, 2)
    assert curves.outcome.ok


def test_conserved_moieties_hold_to_one_part_in_ten_billion():
    text = "Cat + S <--k1 / k2--> CS\nCS + N --k3--> P + Cat\n2 Cat <--k4 / k5--> Cat2"
    curves = simulate(
        parse_mechanism(text),
        constants={"k1": 50.0, "k2": 0.3, "k3": 4.0, "k4": 1e4, "k5": 2.0},
        start={"Cat": 0.01, "S": 1.0, "N": 1.2},
        times=np.linspace(0, 500, 51),
        sensitivities_to=("k1", "k5"),
    )
    catalyst = curves.of("Cat") + curves.of("CS") + 2 * curves.of("Cat2")
    substrate = curves.of("S") + curves.of("CS") + curves.of("P")
    np.testing.assert_allclose(catalyst, 0.01, rtol=1e-10)
    np.testing.assert_allclose(substrate, 1.0, rtol=1e-10)
    moved = sum(w * curves.sensitivity_of(s) for s, w in (("Cat", 1), ("CS", 1), ("Cat2", 2)))
    assert np.abs(moved).max() < 1e-12


def test_a_fast_equilibrium_does_not_disturb_what_it_conserves():
    """Rates of 4e8 mol/L/s each way cancel; their rounding must neither drift nor cost steps."""
    text = "A + B <--k1 / k2--> C + D\nE <--k3 / k4--> C\nE <--k5 / k6--> B"
    constants = {"k1": 0.034, "k2": 4.5e-5, "k3": 163.0, "k4": 6.06, "k5": 3.14e8, "k6": 4.17e8}
    curves = simulate(
        parse_mechanism(text),
        constants=constants,
        start={"A": 1e-3, "B": 1.0, "D": 1.0, "E": 1.0},
        times=[1e-3, 1.0, 50.0, 190.0, 1e4],
        sensitivities_to=tuple(constants),
    )
    assert curves.outcome.ok, curves.outcome.message
    assert curves.outcome.steps < 6000
    total = sum(curves.of(name) for name in "BCE")
    np.testing.assert_allclose(total, 2.0, rtol=1e-10)
    np.testing.assert_allclose(curves.of("A") + curves.of("D"), 1.001, rtol=1e-10)
    np.testing.assert_allclose(curves.of("E") / curves.of("B"), 4.17 / 3.14, rtol=1e-6)


def test_a_held_species_stays_and_still_drives_the_rate():
    network = parse_mechanism("A + B --k--> C\nhold B")
    curves = simulate(
        network, constants={"k": 2.0}, start={"A": 1.0, "B": 0.5}, times=[1.0], sensitivities_to=("[B]0",)
    )
    np.testing.assert_allclose(curves.of("B"), 0.5, rtol=1e-14)
    np.testing.assert_allclose(curves.of("A"), np.exp(-1.0), rtol=1e-6)
    np.testing.assert_allclose(curves.sensitivity_of("A")[0, 0], -2.0 * np.exp(-1.0), rtol=1e-5)


def test_observables_are_weighted_sums_of_species():
    network = parse_mechanism("2 A --k--> B\nobserve total = [A] + 2*[B]")
    curves = simulate(network, constants={"k": 1.0}, start={"A": 1.0}, times=[0.5, 3.0])
    np.testing.assert_allclose(curves.of("total"), 1.0, rtol=1e-12)
    with pytest.raises(KeyError):
        curves.of("sum")


def test_a_fractional_order_is_integrated_in_mass_action_and_in_a_law():
    """d[A]/dt = -k sqrt([A]) gives sqrt(A) = sqrt(A0) - kt/2."""
    law = parse_mechanism("A --{ k*[A]^0.5 }--> B")
    root = parse_mechanism("A --{ k*sqrt([A]) }--> B")
    for network in (law, root):
        curves = simulate(network, constants={"k": 0.1}, start={"A": 1.0}, times=[5.0, 15.0])
        np.testing.assert_allclose(curves.of("A"), [0.75**2, 0.25**2], rtol=1e-6)
    half = parse_mechanism("0.5 A --k--> B")
    curves = simulate(half, constants={"k": 0.2}, start={"A": 1.0}, times=[5.0, 15.0])
    np.testing.assert_allclose(curves.of("A"), [0.75**2, 0.25**2], rtol=1e-6)


def test_a_root_of_a_species_that_is_not_there_yet_does_not_stop_the_run():
    network = parse_mechanism("A --k1--> B\nA --{ k2*[A]*sqrt([B]) }--> C")
    curves = simulate(
        network,
        constants={"k1": 0.1, "k2": 1.0},
        start={"A": 1.0},
        times=[1.0, 10.0],
        sensitivities_to=("k2",),
    )
    assert curves.outcome.ok, curves.outcome.message
    assert np.isfinite(curves.sensitivities).all()
    np.testing.assert_allclose(curves.values.sum(axis=1), 1.0, rtol=1e-8)


def test_a_large_network_is_integrated_through_sparse_products():
    text = "\n".join(f"X{i} <--f{i} / b{i}--> X{i + 1}" for i in range(45))
    constants = {f"{d}{i}": 1.0 + 0.01 * i for d in "fb" for i in range(45)}
    network = parse_mechanism(text)
    wanted = ("f0", "b44", "f20")
    curves = simulate(network, constants=constants, start={"X0": 1.0}, times=[50.0], sensitivities_to=wanted)
    matrix = np.zeros((46, 46))
    for i in range(45):
        f, b = constants[f"f{i}"], constants[f"b{i}"]
        matrix[i, i] -= f
        matrix[i + 1, i] += f
        matrix[i, i + 1] += b
        matrix[i + 1, i + 1] -= b
    from scipy.linalg import expm

    np.testing.assert_allclose(curves.values[0], expm(50.0 * matrix)[:, 0], rtol=1e-5, atol=1e-11)
    assert np.abs(curves.sensitivities.sum(axis=1)).max() < 1e-10


def test_a_blow_up_is_an_outcome_that_keeps_what_came_before():
    network = parse_mechanism("2 A --k--> 3 A")
    begun = time.monotonic()
    curves = simulate(network, constants={"k": 1.0}, start={"A": 1.0}, times=[0.5, 0.9, 2.0, 3.0])
    assert time.monotonic() - begun < 5.0
    assert not curves.outcome.ok
    assert curves.outcome.status in ("failed", "too many steps")
    assert curves.outcome.reached == 0.9
    np.testing.assert_allclose(curves.of("A")[:2], [2.0, 10.0], rtol=1e-5)
    assert np.isnan(curves.values[2:]).all()
    assert "0.9" in curves.outcome.message


def test_too_many_steps_is_an_outcome_not_a_hang():
    network = parse_mechanism("A --k1--> B\nB --k2--> A")
    for wanted in ((), ("k1",)):
        curves = simulate(
            network,
            constants={"k1": 1.0, "k2": 1.0},
            start={"A": 1.0},
            times=[0.1, 50.0],
            max_steps=15,
            sensitivities_to=wanted,
        )
        assert curves.outcome.status == "too many steps"
        assert np.isnan(curves.values[-1]).all()


def test_wall_time_is_bounded():
    text = "A + B --k1--> 2 B\nB + C --k2--> 2 C\nC --k3--> D\nhold A"  # oscillates for ever (Lotka 1920)
    begun = time.monotonic()
    curves = simulate(
        parse_mechanism(text),
        constants={"k1": 1.0, "k2": 1.0, "k3": 1.0},
        start={"A": 1.0, "B": 0.1, "C": 0.1},
        times=[1e7],
        max_steps=10**9,
        max_seconds=0.2,
    )
    assert curves.outcome.status == "out of time"
    assert time.monotonic() - begun < 2.0


def test_a_law_that_is_not_defined_is_an_outcome_that_says_so():
    network = parse_mechanism("A --{ k*log([A] - 0.5) }--> B")
    curves = simulate(network, constants={"k": 1.0}, start={"A": 0.4}, times=[1.0])
    assert curves.outcome.status == "failed"
    assert "not defined" in curves.outcome.message


@pytest.mark.parametrize(
    ("change", "named"),
    [
        ({"constants": {"k": 1.0, "kk": 2.0}}, "kk"),
        ({"constants": {}}, "constant k has no value"),
        ({"constants": {"k": float("nan")}}, "not finite"),
        ({"start": {"Z": 1.0}}, "species Z"),
        ({"start": {"A": -1.0}}, "-1 of A is negative"),
        ({"start": {"A": float("nan")}}, "A is not finite"),
        ({"times": [0.0, 2.0, 1.0]}, "1 s follows 2 s"),
        ({"times": [-1.0]}, "before the run starts"),
        ({"times": [float("inf")]}, "not finite"),
        ({"sensitivities_to": ("q",)}, "q"),
        ({"rtol": 1e-20}, "tolerance"),
        ({"atol": {"A": 1e-9}}, "no absolute tolerance for B"),
        ({"conditions": Conditions(temperature=-3.0)}, "-3 K"),
    ],
)
def test_input_that_cannot_be_used_is_named(change, named):
    ask = {"constants": {"k": 1.0}, "start": {"A": 1.0}, "times": [1.0], **change}
    with pytest.raises(InvalidInput, match=named):
        simulate(parse_mechanism("A --k--> B"), **ask)


def test_a_law_that_needs_the_temperature_asks_for_it():
    with pytest.raises(InvalidInput, match="temperature"):
        simulate(parse_mechanism("A --{ k*T*[A] }--> B"), constants={"k": 1.0}, start={"A": 1.0}, times=[1.0])


def test_a_law_may_use_the_temperature_of_the_run():
    network = parse_mechanism("A --{ k*T*[A] }--> B")
    curves = simulate(
        network,
        constants={"k": 1e-3},
        start={"A": 1.0},
        times=[2.0],
        conditions=Conditions(temperature=300.0),
    )
    np.testing.assert_allclose(curves.of("A"), np.exp(-0.6), rtol=1e-6)


def test_every_problem_is_named_at_once():
    with pytest.raises(InvalidInput) as caught:
        simulate(parse_mechanism("A --k--> B"), constants={"q": 1.0}, start={"Z": 1.0}, times=[1.0, 0.0])
    assert len(caught.value.problems) == 4
