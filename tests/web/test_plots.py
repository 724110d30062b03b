"""What a plot shows in words, and the marks of its species."""

from __future__ import annotations

import numpy as np
import pytest

from kinetics_db.web.marks import SHAPES, colour_class, shape
from kinetics_db.web.plots import Plot, Series, describe

TIMES = np.linspace(0.0, 60.0, 13)
FALLING = 100.0 * np.exp(-TIMES / 20.0)


def plot(*series: Series, model_name: str = "") -> Plot:
    return Plot(series, "min", "mmol/L", model_name)


def test_a_plot_says_in_words_what_it_shows() -> None:
    shown = plot(Series("lactone", TIMES, FALLING), model_name="slow path v1")
    assert describe(shown) == "lactone: 13 points, from 100 to 4.98 mmol/L between 0 and 60 min."


def test_a_curve_is_named_where_there_is_one() -> None:
    shown = plot(Series("lactone", TIMES, FALLING, TIMES, FALLING), model_name="slow path v1")
    assert describe(shown).endswith("between 0 and 60 min. lines: slow path v1.")


def test_a_missing_value_is_not_counted() -> None:
    values = FALLING.copy()
    values[[0, 3]] = np.nan
    words = describe(plot(Series("lactone", TIMES, values)))
    assert words == "lactone: 11 points, from 77.9 to 4.98 mmol/L between 5 and 60 min."


@pytest.mark.parametrize("values", [[], [np.nan, np.nan]])
def test_a_series_without_values_says_so(values: list[float]) -> None:
    found = np.array(values)
    assert (
        describe(plot(Series("lactone", np.arange(len(found), dtype=float), found))) == "lactone: no values."
    )


def test_sixty_four_species_differ_in_colour_or_shape() -> None:
    assert len({(colour_class(i), shape(i)[0]) for i in range(64)}) == 64
    assert len({shape(i)[0] for i in range(len(SHAPES))}) == len(SHAPES)
