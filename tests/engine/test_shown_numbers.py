"""Numbers as people read them. The rounding rule is JCGM 100:2008 (GUM), 7.2.6: at most two digits."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.engine.shown_numbers import (
    PAGE,
    TERMINAL,
    difference,
    interval,
    percent,
    plain,
    probability,
    with_uncertainty,
)


def test_a_mass_with_its_uncertainty_reads_as_in_the_guide_to_uncertainty() -> None:
    # JCGM 100:2008, 7.2.2: m_S = 100.021 47 g with a combined standard uncertainty of 0.35 mg
    assert with_uncertainty(100.02147, 0.00035, "g") == "100.02147(35) g"


@pytest.mark.parametrize(
    ("value", "uncertainty", "unit", "text"),
    [
        (1.234, 0.056, "", "1.234(56)"),
        (5.926e-5, 5.2e-7, "1/s", "5.926(52) × 10⁻⁵ 1/s"),
        (0.0983, 0.0004, "mol/L", "0.09830(40) mol/L"),
        (98.3, 0.4, "mmol/L", "98.30(40) mmol/L"),
        (-1.234, 0.056, "", "−1.234(56)"),
        (3.998e7, 1.2e5, "L/mol/s", "3.998(12) × 10⁷ L/mol/s"),
        (1.0, 0.0996, "", "1.00(10)"),
        (0.0, 0.012, "mol/L", "0.000(12) mol/L"),
        (9.9996, 0.0012, "", "9.9996(12)"),
        (99999.7, 0.62, "", "99999.70(62)"),
    ],
)
def test_two_digits_of_the_uncertainty_set_the_last_digit_of_the_value(
    value: float, uncertainty: float, unit: str, text: str
) -> None:
    assert with_uncertainty(value, uncertainty, unit) == text


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (12.3, 4.5, "12.3(4.5)"),
        (1.2, 3.4, "1.2(3.4)"),
        (1.2e-5, 3.4e-4, "0.1(3.4) × 10⁻⁴"),
        (-0.004, 1.0, "0.0(1.0)"),
    ],
)
def test_an_uncertainty_larger_than_the_value_is_written_with_its_decimal_point(
    value: float, uncertainty: float, text: str
) -> None:
    assert with_uncertainty(value, uncertainty) == text


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (12346.0, 678.0, "1.235(68) × 10⁴"),
        (12345.0, 67.8, "12345(68)"),
        (1.0, 34.0, "1(34)"),
        (1.0, 340.0, "0.0(3.4) × 10²"),
    ],
)
def test_digits_that_are_not_known_are_not_written(value: float, uncertainty: float, text: str) -> None:
    assert with_uncertainty(value, uncertainty) == text


@pytest.mark.parametrize("uncertainty", [None, 0.0, math.nan, math.inf, -0.1])
def test_without_a_usable_uncertainty_the_value_stands_alone(uncertainty: float | None) -> None:
    assert with_uncertainty(298.15, uncertainty, "K") == "298.2 K"


@pytest.mark.parametrize("value", [None, math.nan, math.inf, -math.inf])
def test_what_is_no_number_is_a_dash(value: float | None) -> None:
    assert with_uncertainty(value, 0.1, "s") == "–"
    assert plain(value, "s") == "–"
    assert probability(value) == percent(value) == difference(value) == "–"
    assert plain(value, "s", style=TERMINAL) == interval(value, None, style=TERMINAL) == "-"


def test_an_uncertainty_finer_than_a_float_can_tell_is_left_away() -> None:
    assert with_uncertainty(1.5, 1e-20) == "1.5"


@given(
    st.floats(min_value=-1e12, max_value=1e12),
    st.floats(min_value=1e-9, max_value=1e9),
)
def test_reading_the_text_back_gives_value_and_uncertainty_within_their_last_digit(
    value: float, u: float
) -> None:
    text = with_uncertainty(value, u).replace("−", "-")
    if "(" not in text:
        assert abs(value) / u > 1e13
        return
    mantissa, rest = text.split("(")
    inside, _, after = rest.partition(")")
    power = 0
    if after:
        power = int(after.split("10")[1].translate(str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")))
    decimals = len(mantissa.partition(".")[2])
    read_u = float(inside) * 10.0**power if "." in inside else float(inside) * 10.0 ** (power - decimals)
    assert read_u == pytest.approx(u, rel=0.051)
    assert abs(float(mantissa) * 10.0**power - value) <= 0.051 * u + 1e-9 * abs(value)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (25.0, "25"),
        (0.1, "0.1"),
        (0.00012345, "1.234 × 10⁻⁴"),
        (123456.0, "1.235 × 10⁵"),
        (0.0, "0"),
        (-0.0, "0"),
        (-2.5, "−2.5"),
    ],
)
def test_a_value_without_uncertainty_claims_no_trailing_zeros(value: float, text: str) -> None:
    assert plain(value) == text


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (5.823e-5, 6.029e-5, "(5.82 to 6.03) × 10⁻⁵ 1/s"),
        (5.829, 6.021, "5.82 to 6.03 1/s"),
        (-1.26, 2.41, "−1.3 to 2.5 1/s"),
        (0.0123, 3.11, "0.012 to 3.2 1/s"),
        (9.94, 10.01, "9.940 to 10.010 1/s"),
        (0.0, 2.0, "0.0 to 2.0 1/s"),
    ],
)
def test_the_ends_of_an_interval_are_rounded_outwards(low: float, high: float, text: str) -> None:
    assert interval(low, high, "1/s") == text


def test_an_interval_open_at_one_end_is_a_bound() -> None:
    assert interval(30.4, None, "1/s") == "> 30 1/s"
    assert interval(None, 3.21e-4, "1/s") == "< 3.3 × 10⁻⁴ 1/s"
    assert interval(30.4, math.inf, "1/s") == "> 30 1/s"


def test_an_interval_open_at_both_ends_is_a_dash() -> None:
    assert interval(None, None, "1/s") == "–"
    assert interval(math.nan, math.inf) == "–"


def test_an_interval_of_no_width_is_its_value() -> None:
    assert interval(2.5, 2.5, "s") == "2.5 s"


@given(st.floats(min_value=1e-9, max_value=1e9), st.floats(min_value=1e-6, max_value=1e6))
def test_a_written_interval_never_leaves_out_a_part_of_the_computed_one(low: float, width: float) -> None:
    high = low + width
    text = interval(low, high)
    if " to " not in text:
        assert low == high
        return

    def read(end: str) -> float:
        digits, _, power = end.partition(" × 10")
        factor = 10.0 ** int(power.translate(str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789"))) if power else 1.0
        return float(digits) * factor

    if text.startswith("("):
        ends, _, power = text.partition(")")
        below, above = (read(end + power) for end in ends.strip("(").split(" to "))
    else:
        below, above = (read(end) for end in text.split(" to "))
    assert below <= low * (1 + 1e-12)
    assert above >= high * (1 - 1e-12)


@pytest.mark.parametrize(
    ("p", "text"),
    [
        (0.0, "< 0.0001"),
        (0.00994, "0.0099"),
        (0.0101, "0.010"),
        (0.23456, "0.23"),
        (0.0312, "0.031"),
        (0.9951, "0.995"),
        (0.9996, "> 0.999"),
        (1.0, "> 0.999"),
        (0.00052, "0.00052"),
    ],
)
def test_p_values_keep_the_digits_that_decide(p: float, text: str) -> None:
    assert probability(p) == text


def test_shares_are_percentages_of_two_digits() -> None:
    assert percent(0.02134) == "2.1 %"
    assert percent(0.534) == "53 %"
    assert percent(1.534) == "153 %"
    assert percent(0.0996) == "10 %"
    assert percent(0.00996) == "1.0 %"
    assert percent(0.0) == "0 %"
    assert percent(9999.4) == "999940 %"
    assert percent(123456.0) == "1.2 × 10⁷ %"
    assert percent(1e307) == "1 × 10³⁰⁹ %"


def test_large_differences_have_their_thousands_apart() -> None:
    assert difference(0.0) == "0.0"
    assert difference(-0.01) == "0.0"
    assert difference(-12.34) == "−12.3"
    assert difference(1204.26) == "1\N{NARROW NO-BREAK SPACE}204.3"


def test_differences_from_a_million_on_have_few_digits_and_a_power_of_ten() -> None:
    assert difference(999_999.9) == "999\N{NARROW NO-BREAK SPACE}999.9"
    assert difference(1_234_567.8) == "1.235 × 10⁶"
    assert difference(-1e300) == "−1 × 10³⁰⁰"


@pytest.mark.parametrize(
    ("unit", "text"),
    [("L^2/mol^2/s", "L²/mol²/s"), ("mol^-1", "mol⁻¹"), ("(mol/L)^0.5/s", "(mol/L)^0.5/s"), ("1/s", "1/s")],
)
def test_whole_exponents_of_units_are_raised(unit: str, text: str) -> None:
    assert with_uncertainty(1.234, 0.056, unit) == f"1.234(56) {text}"
    assert interval(0.0123, 3.11, unit) == f"0.012 to 3.2 {text}"


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (1.2341, 0.0056, "1.2341(56)"),
        (0.0114, 0.00011, "0.01140(11)"),
        (1.701e-4, 4.03e-7, "1.7010(40)e-4"),
        (123.4, 5.6, "123.4(5.6)"),
        (1234.0, 560.0, "1.23(56)e3"),
        (-0.5, 0.02, "-0.500(20)"),
        (9.9996e-4, 1.2e-6, "1.0000(12)e-3"),
        (2.0e-5, 4.0e-5, "2.0(4.0)e-5"),
        (3.14159, None, "3.142"),
    ],
)
def test_a_terminal_gets_powers_of_ten_and_signs_in_ascii(
    value: float, uncertainty: float | None, text: str
) -> None:
    assert with_uncertainty(value, uncertainty, style=TERMINAL) == text


def test_a_terminal_gets_intervals_in_ascii() -> None:
    assert interval(1.6931e-4, 1.7089e-4, "1/s", style=TERMINAL) == "(1.693 to 1.709)e-4 1/s"
    assert interval(-1.26, 2.41, style=TERMINAL) == "-1.3 to 2.5"
    assert interval(1e-9, 2.0, style=TERMINAL) == "1e-9 to 2"
    assert interval(None, -3.21e-4, style=TERMINAL) == "< -3.2e-4"
    assert interval(None, None, style=TERMINAL) == "-"


def test_a_terminal_gets_units_and_differences_as_they_are_typed() -> None:
    assert plain(2.5e7, "L^2/mol^2/s", style=TERMINAL) == "2.5e7 L^2/mol^2/s"
    assert difference(-1234.56, style=TERMINAL) == "-1234.6"
    assert difference(1_234_567.8, style=TERMINAL) == "1.235e6"
    assert percent(123456.0, style=TERMINAL) == "1.2e7 %"
    assert probability(-1e-9, style=TERMINAL) == "< 0.0001"


ANY = st.none() | st.floats()


@given(ANY, ANY)
def test_page_and_terminal_differ_in_their_letters_only(a: float | None, b: float | None) -> None:
    def as_typed(text: str) -> str:
        if text == PAGE.nothing:
            return TERMINAL.nothing
        text = text.replace(PAGE.times_ten, "e").replace(PAGE.thousands, "").replace(PAGE.minus, "-")
        return text.translate(str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789"))

    for function in (with_uncertainty, interval):
        text = function(a, b, "L/mol/s", style=TERMINAL)
        assert text.isascii()
        assert text == as_typed(function(a, b, "L/mol/s"))
    for function in (plain, probability, percent, difference):
        text = function(a, style=TERMINAL)
        assert text.isascii()
        assert text == as_typed(function(a))
