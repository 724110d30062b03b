"""Names with subscripts, and the units a project's numbers are shown in."""

from __future__ import annotations

import pytest

from kinetics_db.web.names import name_html
from kinetics_db.web.present.units import Units, factor, units_for


@pytest.mark.parametrize(
    ("name", "html"),
    [
        ("k_1", "k<sub>1</sub>"),
        ("k_add_back", "k<sub>add,back</sub>"),
        ("k", "k"),
        ("kcat", "kcat"),
        ("[S]0", "[S]<sub>0</sub>"),
        ("[<b>]0", "[&lt;b&gt;]<sub>0</sub>"),
        ("<i>_1", "&lt;i&gt;_1"),
        ("k_<i>", "k_&lt;i&gt;"),
    ],
)
def test_indices_become_subscripts_and_markup_stays_text(name: str, html: str) -> None:
    assert name_html(name) == html


@pytest.mark.parametrize(
    ("largest", "unit"),
    [(12.0, "mol/L"), (1.5, "mmol/L"), (0.1, "mmol/L"), (1e-3, "mmol/L"), (2e-5, "µmol/L"), (0.0, "mmol/L")],
)
def test_concentrations_are_shown_in_the_unit_that_a_bench_would_use(largest: float, unit: str) -> None:
    assert units_for(concentrations=[largest / 3, largest], durations=[]).concentration == unit


@pytest.mark.parametrize(
    ("longest", "unit"), [(120.0, "s"), (3600.0, "min"), (86400.0, "h"), (30 * 86400.0, "d"), (0.0, "s")]
)
def test_times_are_shown_in_the_unit_of_the_longest_run(longest: float, unit: str) -> None:
    assert units_for(concentrations=[], durations=[longest / 7, longest]).time == unit


def test_a_project_without_numbers_has_units_too() -> None:
    assert units_for(concentrations=[], durations=[]) == Units("mmol/L", "s")


def test_percentages_stay_percentages_whatever_the_unit_of_concentrations() -> None:
    units = Units("mmol/L", "min")
    assert units.concentration_of("relative") == "%"
    assert units.concentration_of("mol/L") == "mmol/L"


@pytest.mark.parametrize(
    ("unit", "to", "times"),
    [("mol/L", "mmol/L", 1000.0), ("1", "%", 100.0), ("percent", "%", 1.0), ("s", "h", 1 / 3600)],
)
def test_numbers_are_multiplied_by_the_exact_factor(unit: str, to: str, times: float) -> None:
    assert factor(unit, to) == pytest.approx(times, rel=1e-15)
