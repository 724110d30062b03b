"""Names and units in column headers."""

import pytest

from kinetics_db.engine.reading.headers import Header, is_units_row, parse_header


@pytest.mark.parametrize(
    ("text", "name", "unit"),
    [
        ("time / min", "time", "min"),
        ("t (s)", "t", "s"),
        ("Time [min]", "Time", "min"),
        ("Time (Min)", "Time", "Min"),
        ("t/h", "t", "h"),
        ("I(lactone)/a.u.", "I(lactone)", "a.u."),
        ("[lactone] / mM", "[lactone]", "mM"),
        ("[lactone]", "[lactone]", None),
        ("c(acid) in mmol/L", "c(acid)", "mmol/L"),
        ("c / mmol/L", "c", "mmol/L"),
        ("c / (mol dm⁻³)", "c", "mol dm⁻³"),
        ("c (mol·L⁻¹)", "c", "mol·L⁻¹"),
        ("c (µM)", "c", "µM"),
        ("Time, s", "Time", "s"),
        ("T / °C", "T", "°C"),
        ("Absorbance 254 nm / AU", "Absorbance 254 nm", "AU"),
        ("conversion / %", "conversion", "%"),
        ("conversion (%)", "conversion", "%"),
        ("A (peak 3)", "A (peak 3)", None),
        ("A/B", "A/B", None),
        ("A/C", "A/C", None),
        ("c(A)", "c(A)", None),
        ("I(S)", "I(S)", None),
        ("c(M)", "c(M)", None),
        ("Signal (A)", "Signal (A)", None),
        ("peak (1)", "peak (1)", None),
        ("peak (2)", "peak (2)", None),
        ("c(A) / M", "c(A)", "M"),
        ("T(K)", "T", "K"),
        ("Conc(M)", "Conc", "M"),
        ("t(s)", "t", "s"),
        ("A/2", "A/2", None),
        ("I/M1", "I/M1", None),
        ("c in mM 2", "c in mM 2", None),
        ("t / s*60", "t / s*60", None),
        ("s*60", "s*60", None),
        ("k / s-1·10^3", "k", "s-1·10^3"),
        ("x / 1", "x", "1"),
        ("k / 10^-3 s-1", "k", "10^-3 s-1"),
        ("m/z 120", "m/z 120", None),
        ("A/B / %", "A/B", "%"),
        ("time_min", "time", "min"),
        ("Time min", "Time", "min"),
        ("min", "time", "min"),
        ("254", "254", None),
        ("  t   /   s ", "t", "s"),
        ("", "", None),
    ],
)
def test_names_and_units_in_many_writings(text: str, name: str, unit: str | None) -> None:
    assert parse_header(text)[:2] == (name, unit)


@pytest.mark.parametrize(
    "text", ["t / s", "time", "Reaction time (h)", "Zeit / min", "elapsed_time (s)", "s", "t"]
)
def test_time_columns_are_known_by_name(text: str) -> None:
    assert parse_header(text).is_time


@pytest.mark.parametrize(
    "text", ["A / mM", "T / K", "exposure / s", "time constant of A / mM", "tert-butanol", "d"]
)
def test_other_columns_are_no_time(text: str) -> None:
    assert not parse_header(text).is_time


def test_clock_forms_in_the_header() -> None:
    assert parse_header("Time (h:mm)") == Header("Time", None, "h:mm")
    assert parse_header("Time [MM:SS]") == Header("Time", None, "mm:ss")
    assert parse_header("Time / h:mm:ss") == Header("Time", None, "h:mm:ss")


def test_a_row_of_units_is_told_from_names_and_numbers() -> None:
    assert is_units_row(["min", "a.u.", ""])
    assert is_units_row(["(s)", "[mM]", "-"])
    assert not is_units_row(["min", "lactone"])
    assert not is_units_row(["", "-"])
    assert not is_units_row(["0", "1.5"])
    assert not is_units_row(["1", "1"])
    assert not is_units_row(["90 s", "1"])
    assert is_units_row(["s", "1"])


def test_long_headers_take_no_time() -> None:
    assert parse_header("a/" * 5000).unit is None
    assert parse_header("(" * 400 + ")" * 90).unit is None
