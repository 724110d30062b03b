"""Units as chemists type them."""

import subprocess
import sys
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kinetics_db.engine.units import (
    STORED_UNITS,
    convert,
    is_unit,
    kind_of_unit,
    numbers_in,
    parse_quantity,
    to_stored,
)
from kinetics_db.errors import InvalidInput


@pytest.mark.parametrize(
    ("units", "kind"),
    [
        ("s sec min h hr d ms µs μs Min SEC minutes hours", "time"),
        ("M mM uM µM μM nM mol/L mmol/L mol·dm⁻³ mol/m^3 mol.L-1", "concentration"),
        ("g mg µg μg ug kg", "mass"),
        ("L l mL uL µL μL cm3 cm³ dm^3 millilitres", "volume"),
        ("mol mmol umol µmol nmol", "amount"),
        ("K degC °C ℃ celsius degF", "temperature"),
        ("m cm mm nm µm Å angstrom", "length"),
        ("% percent mol% ppm 1 equiv", "relative"),
        ("a.u. a.u AU mAU counts OD", "arbitrary"),
        ("1/s s-1 s⁻¹ s^-1 s**-1 min^-1 /s", "per time"),
        ("mol/L/s mM/min M·s-1", "rate"),
        ("mW W kW", "power"),
        ("µmol/s mol/h", "amount rate"),
        ("g/mL kg/m3 g/L", "density"),
        ("g/mol kDa/mol", None),
        ("L/mol/s M-1s-1 1/(M·s) M^0.5/s mAU*min C", "other"),
    ],
)
def test_units_are_known_by_what_they_measure(units: str, kind: str | None) -> None:
    for unit in units.split():
        found = kind_of_unit(unit)
        assert found == kind if kind else found


@pytest.mark.parametrize(
    "unit",
    ["mol L-1 s-1", "L mol-1 s-1", "mmol / L", "deg C", "L per mol per s", "mol %", "a. u.", "arb. units"],
)
def test_units_written_with_blanks_are_read(unit: str) -> None:
    assert is_unit(unit)


def test_milli_and_mega_metre_and_molar_are_told_apart_by_case() -> None:
    assert kind_of_unit("m") == "length"
    assert kind_of_unit("M") == "concentration"
    assert convert(1.0, "mM", "M") == 0.001
    assert kind_of_unit("h") == "time"  # the hour, not Planck's constant
    assert convert(1.0, "min", "s") == 60.0  # not a milli-inch


# Recomputed with the general-purpose library pint 0.25.3; kcal and atm are exact by definition.
@pytest.mark.parametrize(
    ("value", "unit", "to", "expected"),
    [
        (1, "kcal/mol", "kJ/mol", 4.184),
        (1, "atm", "Pa", 101325.0),
        (1, "M", "mol/m**3", 1000.0),
        (1, "mM/min", "mol/L/s", 1.6666666666666667e-05),
        (1, "M**-1*s**-1", "m**3/mol/s", 0.001),
        (1, "L/mol/min", "M**-1/s", 0.016666666666666666),
        (25, "degC", "kelvin", 298.15),
        (1, "eV", "kJ", 1.602176634e-22),
        (1, "torr", "Pa", 133.32236842105263),
        (1, "psi", "Pa", 6894.757293168361),
        (1, "umol/L", "M", 1e-6),
        (2, "hour**-1", "1/s", 0.0005555555555555556),
        (1, "mmHg", "Pa", 133.322387415),
    ],
)
def test_conversions_agree_with_an_independent_library(
    value: float, unit: str, to: str, expected: float
) -> None:
    assert convert(float(value), unit, to) == pytest.approx(expected, rel=1e-14)


# Cases 3-101 to 3-129 of the UCUM organisation's functional tests; results there are rounded.
@pytest.mark.parametrize(
    ("value", "unit", "to", "expected", "digits"),
    [
        (6.3, "mm", "m", 0.0063, 1e-12),
        (6.3, "s.m-1", "s/m", 6.3, 1e-12),
        (6.3, "s.mm-2", "s.m-2", 6300000, 1e-12),
        (6.3, "s/mm/g", "s.m-1.g-1", 6300, 1e-12),
        (6.3, "s/m.mg", "s.m-1.g", 0.0063, 1e-12),
        (6.30, "4.s/m", "s/m", 25.2, 1e-12),
        (6.3, "s/4/m", "s/m", 1.6, 0.02),
        (6.300, "[in_i]", "cm", 16.0, 2e-3),
        (6.3, "g.m.s-2.A-2", "g.m.C-2", 6.3, 1e-12),
        (1, "10*-7.s", "s", 1e-7, 1e-12),
        (1, "4.[pi].10*-7.N", "N", 1.25663706143591729538506e-6, 1e-12),
        (1, "[mu_0]", "g.m.C-2", 0.00125663706143591729538506, 1e-9),
        (1, "m[Hg]", "g.s-2.m-1", 133322000, 1e-5),
        (1, "S", "g-1.m-2.C2.s", 0.001, 1e-12),
        (1, "[ly]", "cm", 946073047258080000, 1e-12),
        (1, "1/[ly]", "cm-1", 1.05700083402461546370946e-18, 1e-12),
    ],
)
def test_published_conversions_in_ucum_notation(
    value: float, unit: str, to: str, expected: float, digits: float
) -> None:
    assert convert(float(value), unit, to) == pytest.approx(expected, rel=digits)


def test_a_conversion_by_a_power_of_ten_rounds_once() -> None:
    assert convert(9.0, "mM", "mol/L") == 0.009
    values = np.arange(1.0, 2000.0)
    assert np.array_equal(convert(values, "mM", "M"), values / 1000)


def test_temperatures_move_their_zero_and_differences_do_not() -> None:
    assert convert(25.0, "degC", "K") == 298.15
    assert convert(298.15, "K", "°C") == pytest.approx(25.0, abs=1e-12)
    assert convert(77.0, "degF", "degC") == pytest.approx(25.0, abs=1e-12)
    assert convert(0.5, "degC", "K", difference=True) == 0.5
    assert convert(9.0, "degF", "K", difference=True) == pytest.approx(5.0)


def test_degrees_in_a_product_are_refused_with_the_cure() -> None:
    with pytest.raises(InvalidInput, match="write K"):
        kind_of_unit("J/degC")


def test_c_alone_is_the_coulomb_and_the_message_says_so() -> None:
    with pytest.raises(InvalidInput, match="coulomb; write degC"):
        convert(25.0, "C", "K")


def test_missing_values_stay_missing_through_a_conversion() -> None:
    assert np.array_equal(convert(np.array([1.0, np.nan]), "min", "s"), [60.0, np.nan], equal_nan=True)


@pytest.mark.parametrize(
    ("unit", "near"), [("mmoll", "mmol"), ("sek", "sec"), ("mmo", "mmol"), ("DEGC", "degC")]
)
def test_an_unknown_unit_is_refused_with_near_matches(unit: str, near: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        kind_of_unit(unit)
    assert near in str(caught.value)


def test_units_of_different_kinds_do_not_convert() -> None:
    with pytest.raises(InvalidInput, match=r"'mg' \(mass\) cannot become 'mol' \(amount\)"):
        convert(1.0, "mg", "mol")


def test_a_product_after_a_slash_is_refused_as_it_can_be_read_in_two_ways() -> None:
    for unit in ("L/mol s", "L/mol*s", "kJ/mol·K"):
        with pytest.raises(InvalidInput, match="two ways"):
            kind_of_unit(unit)
    assert convert(1.0, "L/(mol s)", "L/mol/s") == 1.0


@pytest.mark.parametrize(
    "text",
    [
        "9**9**9**9", "s**99999999", "s**99", "s" * 100_000, "(" * 50, "s" + "/s" * 25, '__import__("os")',
        "m\x00", "1e5", "2s", "s//m", "s/0", "()", "(s", "s)", "/", ".s", "s.", "s-0", "\ud800", "9" * 50,
        "a" * 59, "M^0.5^2", "lambda: 0", "eV12.5/eV12.5", "((s))",
    ],
)  # fmt: skip
def test_hostile_or_broken_text_is_refused_at_once(text: str) -> None:
    is_unit("s")  # loads the library outside the clock
    start = time.perf_counter()
    with pytest.raises(InvalidInput):
        kind_of_unit(text)
    assert time.perf_counter() - start < 0.2


@settings(max_examples=150, deadline=2000)
@given(st.text(max_size=70) | st.text(alphabet="smMLgol/*^.()- 0123456789%µ", max_size=30))
def test_any_text_is_a_unit_or_refused(text: str) -> None:
    try:
        assert isinstance(kind_of_unit(text), str)
    except InvalidInput as refused:
        assert refused.problems[0].field == "unit"


@settings(max_examples=100, deadline=2000)
@given(st.floats(-1e12, 1e12), st.sampled_from(["mM", "µM", "mol/m3", "nM", "mmol/mL"]))
def test_there_and_back_is_the_same_value(value: float, unit: str) -> None:
    if value != 0 and abs(value) < 1e-200:
        return
    assert convert(convert(value, unit, "mol/L"), "mol/L", unit) == pytest.approx(value, rel=1e-15)


def test_values_that_leave_the_range_of_numbers_are_refused() -> None:
    with pytest.raises(InvalidInput, match="too large or too small"):
        convert(1e308, "kg", "mg")
    with pytest.raises(InvalidInput, match="too large or too small"):
        convert(np.array([1e308]), "kg", "mg")
    with pytest.raises(InvalidInput, match="too large or too small"):
        convert(5e-324, "mg", "kg")


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("12.3 mg", 12.3, "mg"),
        ("-5degC", -5.0, "degC"),
        ("1e-3 mol/L", 1e-3, "mol/L"),
        ("7", 7.0, ""),
        (".5 h", 0.5, "h"),
    ],
)
def test_quantities_are_read_as_typed(text: str, value: float, unit: str) -> None:
    assert parse_quantity(text) == (value, unit)


@pytest.mark.parametrize(
    "text",
    [
        "", "mg", "12,3 mg", "1.2.3 mg", "1e999 mg", "nan mg", "5 blobs", "9**9 s", "1 2 s", "12 mg 5", "1 h 30",
        "12 mg*5", "12 mg/5", "3/4", "1h01", "1 h(1)", "1h30", "1 mM 10*3", "1 200 g", "5 a.u. 3",
    ],
)  # fmt: skip
def test_texts_that_are_no_quantity_are_refused(text: str) -> None:
    with pytest.raises(InvalidInput):
        parse_quantity(text)


def test_a_number_a_blank_away_from_a_unit_is_no_factor_of_it() -> None:
    for unit in ("h 30", "mg 5", "200 s", "a.u. 3", "mg/mL 5", "s 2"):
        with pytest.raises(InvalidInput, match="a number stands beside a unit without a sign"):
            kind_of_unit(unit)
    assert convert(1.0, "4 * s", "s") == 4.0
    assert kind_of_unit("M 1/s") == "rate"


def test_numbers_that_would_scale_a_value_unseen_are_found_in_a_unit() -> None:
    assert numbers_in("4.s/m") == ["4"]
    assert numbers_in("mol 10*3/s") == ["10*3"]
    assert numbers_in("mM/h01") == ["h01"]
    assert numbers_in("1") == ["1"]
    for unit in ("", "mM", "L mol-1 s-1", "cm3", "mol·dm⁻³", "a.u.", "M^0.5/s"):
        assert numbers_in(unit) == []


def test_stored_units_are_of_their_own_kind() -> None:
    for kind, unit in STORED_UNITS.items():
        assert kind_of_unit(unit) == kind
    assert to_stored(250.0, "uL", "volume") == 0.00025
    with pytest.raises(InvalidInput):
        to_stored(250.0, "uL", "mass")


def test_importing_the_units_does_not_load_the_library_behind_them() -> None:
    code = "import sys, kinetics_db.engine.units; print('pint' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
