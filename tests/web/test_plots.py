"""Plots as SVG."""

from __future__ import annotations

import re
from itertools import pairwise
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.web.axes import axis, nice_step
from kinetics_db.web.marks import SHAPES, colour_class, shape
from kinetics_db.web.plots import BOTTOM, LEFT, MOST_POINTS, RADIUS, RIGHT, TOP, Plot, Series, describe, draw

TIMES = np.linspace(0.0, 60.0, 13)
FALLING = 100.0 * np.exp(-TIMES / 20.0)


def plot(*series: Series, model_name: str = "") -> Plot:
    return Plot("p1", "run A1", series, "min", "mmol/L", model_name)


def parsed(drawn: str) -> ElementTree.Element:
    return ElementTree.fromstring(drawn)


def number(element: ElementTree.Element, name: str) -> float:
    return float(element.attrib[name])


def of_class(svg: ElementTree.Element, name: str) -> list[ElementTree.Element]:
    return [e for e in svg.iter() if name in e.get("class", "").split()]


def paths(svg: ElementTree.Element, name: str) -> list[str]:
    return [e.get("d", "") for e in of_class(svg, name) if e.tag == "path"]


def test_a_plot_has_a_title_and_says_in_words_what_it_shows() -> None:
    svg = parsed(draw(plot(Series("lactone", 0, TIMES, FALLING), model_name="slow path v1")))
    named = svg.get("aria-labelledby", "").split()
    assert svg.get("role") == "img"
    texts = {e.get("id"): e.text for e in svg.iter() if e.get("id") in named}
    assert texts["p1-t"] == "run A1"
    assert texts["p1-d"] == "lactone: 13 points, from 100 to 4.98 mmol/L between 0 and 60 min."


def test_points_stand_where_the_axes_say() -> None:
    drawn = parsed(draw(plot(Series("lactone", 1, np.array([0.0, 50.0]), np.array([100.0, 25.0])))))
    ticks = {e.text: e for e in of_class(drawn, "tick")}
    x50 = next(number(e, "x") for e in of_class(drawn, "x") if e.text == "50")
    y100, y0 = (number(ticks[t], "y") - 4 for t in ("100", "0"))
    corners = [tuple(map(float, m)) for m in re.findall(r"[ML]([\d.]+) ([\d.]+)", paths(drawn, "mark")[0])]
    second = corners[4:8]  # squares have four corners
    assert np.mean([c[0] for c in second]) == pytest.approx(x50, abs=0.1)
    assert np.mean([c[1] for c in second]) == pytest.approx(y0 + 0.25 * (y100 - y0), abs=0.1)


def test_error_bars_reach_one_standard_uncertainty_up_and_down() -> None:
    spread = np.full(TIMES.size, 20.0)
    drawn = parsed(draw(plot(Series("lactone", 0, TIMES, FALLING, spread))))
    ys = {e.text: number(e, "y") - 4 for e in of_class(drawn, "tick") if "y" in e.attrib["class"].split()}
    per_unit = (ys["0"] - ys["100"]) / 100.0
    ends = [tuple(map(float, m)) for m in re.findall(r" ([\d.]+)V([\d.]+)", paths(drawn, "bar")[0])]
    assert len(ends) == TIMES.size
    assert all(a - b == pytest.approx(40.0 * per_unit, abs=0.2) for a, b in ends)


def test_without_uncertainties_there_are_no_error_bars() -> None:
    svg = parsed(draw(plot(Series("lactone", 0, TIMES, FALLING, np.full(TIMES.size, np.nan)))))
    assert not paths(svg, "bar")


def test_a_missing_value_is_not_drawn_and_not_counted() -> None:
    values = FALLING.copy()
    values[3] = np.nan
    svg = parsed(draw(plot(Series("lactone", 0, TIMES, values))))
    assert paths(svg, "mark")[0].count("Z") == TIMES.size - 1
    assert "nan" not in ElementTree.tostring(svg, encoding="unicode").lower()
    assert "12 points" in describe(plot(Series("lactone", 0, TIMES, values)))


def test_a_curve_goes_through_the_models_values_and_is_explained() -> None:
    series = Series("lactone", 0, TIMES, FALLING, None, TIMES, FALLING)
    svg = parsed(draw(plot(series, model_name="slow path v1")))
    curve = [tuple(map(float, m)) for m in re.findall(r"[ML]([\d.]+) ([\d.]+)", paths(svg, "curve")[0])]
    centres = re.findall(r"M([\d.]+) ([\d.]+)a", paths(svg, "mark")[0])
    assert len(curve) == len(centres) == TIMES.size
    for (x, y), (left, middle) in zip(curve, centres, strict=True):
        assert (x, y) == pytest.approx((float(left) + RADIUS, float(middle)), abs=0.11)
    assert "model" in [e.text for e in of_class(svg, "key")]
    assert "lines: slow path v1" in describe(plot(series, model_name="slow path v1"))


def test_a_curve_has_a_gap_where_the_model_has_no_value() -> None:
    model = FALLING.copy()
    model[5] = np.nan
    svg = parsed(draw(plot(Series("lactone", 0, TIMES, FALLING, None, TIMES, model))))
    assert paths(svg, "curve")[0].count("M") == 2


def test_a_curve_that_runs_away_does_not_squeeze_the_points() -> None:
    svg = parsed(draw(plot(Series("lactone", 0, TIMES, FALLING, None, TIMES, FALLING * 1e6))))
    highest = max(float(e.text or 0) for e in of_class(svg, "tick") if "y" in e.attrib["class"].split())
    assert highest <= 200.0


def test_values_below_zero_stay_in_the_picture() -> None:
    values = np.linspace(-3.0, 10.0, TIMES.size)
    svg = parsed(draw(plot(Series("acid", 0, TIMES, values, np.full(TIMES.size, 1.0)))))
    numbers = [float(n) for n in re.findall(r"M[\d.]+ ([\d.]+)a", paths(svg, "mark")[0])]
    assert min(numbers) >= TOP
    assert max(numbers) <= BOTTOM


@pytest.mark.parametrize("values", [[], [np.nan, np.nan]])
def test_a_table_without_values_says_so(values: list[float]) -> None:
    series = Series("lactone", 0, np.arange(float(len(values))), np.array(values))
    assert "no values to draw" in draw(plot(series))
    assert "lactone: no values" in draw(plot(series))


def test_one_single_point_can_be_drawn() -> None:
    svg = parsed(draw(plot(Series("lactone", 0, np.array([0.0]), np.array([0.0])))))
    assert paths(svg, "mark")[0].count("Z") == 1


def test_very_long_tables_are_thinned_out_but_keep_their_ends() -> None:
    times = np.linspace(0.0, 100.0, 5000)
    svg = parsed(draw(plot(Series("lactone", 0, times, times))))
    assert paths(svg, "mark")[0].count("Z") == MOST_POINTS
    xs = [float(x) for x in re.findall(r"M([\d.]+) [\d.]+a", paths(svg, "mark")[0])]
    assert (min(xs) + RADIUS, max(xs) + RADIUS) == pytest.approx((LEFT + 4, RIGHT - 4), abs=0.2)


def test_a_name_with_markup_stays_text() -> None:
    drawn = draw(plot(Series('<script>"&\x0b', 0, TIMES, FALLING)))
    assert "<script" not in drawn
    assert "&lt;script&gt;" in drawn
    parsed(drawn)


def test_a_plot_needs_no_inline_style_or_script() -> None:
    drawn = draw(plot(Series("lactone", 0, TIMES, FALLING, FALLING / 20, TIMES, FALLING)))
    assert not re.search(r"style=|<style|<script|\son\w+=|href=", drawn)


def test_every_series_stands_in_the_key_with_its_own_marker() -> None:
    names = ["lactone", "adduct", "ester", "acid"]
    svg = parsed(draw(plot(*(Series(n, i, TIMES, FALLING) for i, n in enumerate(names)))))
    assert [e.text for e in of_class(svg, "key")] == names
    keys = [g for g in svg if any("key" in e.get("class", "") for e in g)]

    def outline(path: str) -> tuple[float, ...]:
        corners = [tuple(map(float, pair)) for pair in re.findall(r"([\d.]+) ([\d.]+)", path)]
        return tuple(
            round(end - begin, 0) for a, b in pairwise(corners) for begin, end in zip(a, b, strict=True)
        )

    outlines = {outline(next(iter(g)).attrib["d"]) for g in keys}
    assert len(outlines) == len({g.get("class") for g in keys}) == len(names)


def test_a_long_key_is_cut_and_says_how_many_are_left_out() -> None:
    svg = parsed(draw(plot(*(Series(f"s{i}", i, TIMES, FALLING) for i in range(12)))))
    assert of_class(svg, "key")[-1].text == "and 4 more"


def test_sixty_four_species_differ_in_colour_or_shape() -> None:
    assert len({(colour_class(i), shape(i)[0]) for i in range(64)}) == 64
    assert len({shape(i)[0] for i in range(len(SHAPES))}) == len(SHAPES)


@given(st.floats(min_value=1e-12, max_value=1e12))
def test_a_step_is_one_two_or_five_times_a_power_of_ten(rough: float) -> None:
    step = nice_step(rough)
    assert rough * (1 - 1e-8) <= step <= 2.51 * rough
    assert float(f"{step:e}".split("e")[0]) in (1.0, 2.0, 5.0)


@given(st.floats(min_value=-1e6, max_value=1e6), st.floats(min_value=1e-3, max_value=1e6))
def test_an_axis_covers_its_values_with_a_few_evenly_spaced_ticks(low: float, width: float) -> None:
    found = axis(low, low + width, 0.0, 400.0)
    assert found.low <= low + 1e-6 * width
    assert found.high >= low + width - 1e-6 * width
    assert 2 <= len(found.ticks) <= 8
    steps = [b - a for a, b in pairwise(found.ticks)]
    assert max(steps) == pytest.approx(min(steps), rel=1e-6, abs=1e-9)
    assert all(-0.01 <= found.place(t) <= 400.01 for t in found.ticks)


def test_tick_labels_have_the_decimals_of_their_distance() -> None:
    found = axis(0.0, 0.1, 0.0, 100.0, about=5)
    assert [found.label(t) for t in found.ticks] == ["0.00", "0.02", "0.04", "0.06", "0.08", "0.10"]
    found = axis(-20.0, 80.0, 0.0, 100.0)
    assert [found.label(t) for t in found.ticks] == ["−20", "0", "20", "40", "60", "80"]
