"""Numbers in HTML: read as text, copied with every digit."""

from __future__ import annotations

import math

import pytest

from kinetics_db.engine.shown_numbers import plain, with_uncertainty
from kinetics_db.web.numbers import shown


def test_every_digit_can_be_copied_from_a_page() -> None:
    html = shown(5.9261234567e-05, 5.2e-7, "1/s").html
    assert html == (
        '<data value="5.9261234567e-05" title="5.9261234567e-05 1/s, standard uncertainty 5.2e-07">'
        "5.926(52) × 10⁻⁵ 1/s</data>"
    )


def test_a_unit_with_markup_in_it_stays_text() -> None:
    assert "<b>" not in shown(1.0, 0.1, "<b>").html


@pytest.mark.parametrize("value", [None, math.nan, math.inf, -math.inf])
def test_what_is_no_number_is_a_dash_with_nothing_to_copy(value: float | None) -> None:
    assert shown(value, 0.1, "s").html == "–"


@pytest.mark.parametrize("uncertainty", [None, 0.0, math.nan, math.inf, -0.1])
def test_without_a_usable_uncertainty_none_is_copied_and_the_digits_asked_for_are_read(
    uncertainty: float | None,
) -> None:
    number = shown(298.15, uncertainty, "K", digits=3)
    assert (number.text, number.exact) == (plain(298.15, "K", digits=3), "298.15 K")


def test_a_template_that_prints_a_number_gets_its_reading_text() -> None:
    assert str(shown(298.15, 0.05, "K")) == with_uncertainty(298.15, 0.05, "K")
