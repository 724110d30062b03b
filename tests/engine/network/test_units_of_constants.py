"""The unit of a rate constant follows from the order of its step."""

from __future__ import annotations

import pytest

from kinetics_db.engine.network import constant_units, parse_mechanism, unit_of_order
from kinetics_db.engine.units import convert
from kinetics_db.errors import InvalidInput


def test_each_constant_has_the_unit_of_its_order() -> None:
    network = parse_mechanism(
        "nothing --k_0--> A\n"
        "A <--k_1 / k_2--> B + C\n"
        "2 A + B --k_3--> C\n"
        "0.5 A --k_half--> B\n"
        "A + 0.5 B --k_fraction--> C\n"
    )
    assert constant_units(network) == {
        "k_0": "mol/L/s",
        "k_1": "1/s",
        "k_2": "L/mol/s",
        "k_3": "L^2/mol^2/s",
        "k_half": "mol^0.5/L^0.5/s",
        "k_fraction": "L^0.5/mol^0.5/s",
    }


def test_a_held_species_counts_in_the_order() -> None:
    network = parse_mechanism("A + H2O --k--> B\nhold H2O")
    assert constant_units(network) == {"k": "L/mol/s"}


def test_no_unit_is_claimed_for_what_stands_in_laws_and_expressions_only() -> None:
    network = parse_mechanism("A --{ k*[A]/(1 + K*[A]) }--> B\nB --q--> A\nwhere q = q_0*exp(-Ea/T)")
    assert constant_units(network) == {"k": "", "K": "", "q_0": "", "Ea": "", "q": "1/s"}


@pytest.mark.parametrize(
    ("order", "concentration", "time", "unit"),
    [
        (0, "percent", "min", "percent/min"),
        (1, "percent", "min", "1/min"),
        (2, "percent", "min", "1/percent/min"),
        (3, "percent", "min", "1/percent^2/min"),
        (2, "%", "h", "1/%/h"),
        (2, "mmol/L", "min", "L/mmol/min"),
        (0, "mol/m^3", "s", "mol/m^3/s"),
        (2, "mol/m^3", "s", "m^3/mol/s"),
        (3, "mol/m^3", "s", "m^6/mol^2/s"),
        (1.5, "µM", "s", "1/µM^0.5/s"),
        (0.1 + 0.2, "M", "s", "M^0.7/s"),
        (2, "1/L", "s", "L/s"),
    ],
)
def test_other_units_of_concentration_and_time_can_be_given(
    order: float, concentration: str, time: str, unit: str
) -> None:
    assert unit_of_order(order, concentration=concentration, time=time) == unit


@pytest.mark.parametrize("unit", ["", "mol//L", "2 mol", "mol/(L s)"])
def test_what_is_no_unit_of_concentration_is_refused(unit: str) -> None:
    with pytest.raises(InvalidInput, match="unit of concentrations"):
        unit_of_order(2, concentration=unit)


@pytest.mark.parametrize("order", [0, 0.5, 1, 1.5, 2, 3, 4])
def test_every_unit_of_a_constant_can_be_read_and_converts_with_its_order(order: float) -> None:
    """1 mmol/L is 1e-3 mol/L, so a constant per mmol/L is larger by 1000^(order - 1) per mol/L."""
    in_millimolar = unit_of_order(order, concentration="mmol/L", time="min")
    value = convert(1.0, in_millimolar, unit_of_order(order))
    assert value == pytest.approx(1000.0 ** (order - 1) / 60.0, rel=1e-12)
