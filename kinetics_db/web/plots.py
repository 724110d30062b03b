"""Small plots as inline SVG, drawn on the server: points with error bars, and a model's curve.

The drawing carries classes only; colours are the style sheet's, so light and dark need no second drawing.
ElementTree builds it, hence every name from the record is escaped.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from xml.etree.ElementTree import Element, SubElement, tostring

import numpy as np
from django.utils.safestring import SafeString, mark_safe
from numpy.typing import NDArray

from kinetics_db.engine.shown_numbers import plain
from kinetics_db.web.axes import Axis, axis
from kinetics_db.web.marks import colour_class, shape

Floats = NDArray[np.float64]

WIDTH, HEIGHT = 600, 252
LEFT, RIGHT, TOP, BOTTOM = 60, 446, 12, 208
RADIUS = 2.8
LONGEST_NAME = 17
MOST_IN_KEY = 9
MOST_POINTS = 300
"""More points of a species than this are thinned out evenly: they would hide each other."""
MODEL_ROOM = 0.5
"""A curve may leave the measured range by this share of it; what goes farther is cut off."""


@dataclass(frozen=True, eq=False)
class Series:
    """One species or observable.

    Attributes
    ----------
    name : as in the table
    position : which colour and marker it has throughout the project
    times, values : ndarray, shape (n,), in the plot's units; NaN is 'no value'
    uncertainties : ndarray, shape (n,), or None
    model_times, model : ndarray, shape (k,), or None where there is no curve
    """

    name: str
    position: int
    times: Floats
    values: Floats
    uncertainties: Floats | None = None
    model_times: Floats | None = None
    model: Floats | None = None


@dataclass(frozen=True)
class Plot:
    """Several series over time. ``identity`` is unique on the page; it names the drawing's parts."""

    identity: str
    title: str
    series: Sequence[Series]
    time_unit: str
    value_unit: str
    model_name: str = ""


def draw(plot: Plot) -> SafeString:
    """The plot as an <svg> element with a title and a description in words."""
    svg = Element("svg", {
        "class": "plot", "viewBox": f"0 0 {WIDTH} {HEIGHT}", "role": "img",
        "aria-labelledby": f"{plot.identity}-t {plot.identity}-d",
    })  # fmt: skip
    _text(svg, "title", plot.title, {"id": f"{plot.identity}-t"})
    _text(svg, "desc", describe(plot), {"id": f"{plot.identity}-d"})
    points = [_points(series) for series in plot.series]
    if not any(times.size for times, _, _ in points):
        _text(svg, "text", "no values to draw", {"class": "empty", "x": str(LEFT), "y": str(HEIGHT // 2)})
        return _finished(svg)
    x, y = _axes(plot, points)
    _frame(svg, plot, x, y)
    area = SubElement(svg, "g", {"clip-path": f"url(#{plot.identity}-c)"})
    for series, (times, values, spreads) in zip(plot.series, points, strict=True):
        _one(area, series, times, values, spreads, x, y)
    _key(svg, plot)
    return _finished(svg)


def describe(plot: Plot) -> str:
    """What the plot shows, for those who do not see it."""
    parts = []
    for series in plot.series:
        known = np.flatnonzero(np.isfinite(series.values))
        if not known.size:
            parts.append(f"{series.name}: no values")
            continue
        first, last = known[0], known[-1]
        parts.append(
            f"{series.name}: {known.size} points, from {plain(float(series.values[first]), digits=3)} to "
            f"{plain(float(series.values[last]), plot.value_unit, digits=3)} between "
            f"{plain(float(series.times[first]), digits=3)} and "
            f"{plain(float(series.times[last]), plot.time_unit, digits=3)}"
        )
    if plot.model_name and any(series.model is not None for series in plot.series):
        parts.append(f"lines: {plot.model_name}")
    return ". ".join(parts) + "."


def _points(series: Series) -> tuple[Floats, Floats, Floats]:
    """Times, values and uncertainties (0 where unknown) of what is drawn."""
    known = np.flatnonzero(np.isfinite(series.values) & np.isfinite(series.times))
    if known.size > MOST_POINTS:
        known = known[np.linspace(0, known.size - 1, MOST_POINTS).round().astype(int)]
    spreads = np.zeros(known.size)
    if series.uncertainties is not None:
        spreads = np.nan_to_num(series.uncertainties[known], nan=0.0)
    return series.times[known], series.values[known], spreads


def _axes(plot: Plot, points: Sequence[tuple[Floats, Floats, Floats]]) -> tuple[Axis, Axis]:
    times = np.concatenate([times for times, _, _ in points])
    low = min(0.0, *(float((v - u).min()) for _, v, u in points if v.size))
    high = max(float((v + u).max()) for _, v, u in points if v.size)
    room = MODEL_ROOM * (high - low)
    curves = [s.model[np.isfinite(s.model)] for s in plot.series if s.model is not None]
    for curve in curves:
        if curve.size:
            low = min(low, max(float(curve.min()), low - room))
            high = max(high, min(float(curve.max()), high + room))
    x = axis(min(0.0, float(times.min())), float(times.max()), LEFT + 4, RIGHT - 4, about=6)
    return x, axis(low, high, BOTTOM, TOP, about=5)


def _frame(svg: Element, plot: Plot, x: Axis, y: Axis) -> None:
    clip = SubElement(SubElement(svg, "defs"), "clipPath", {"id": f"{plot.identity}-c"})
    SubElement(clip, "rect", {
        "x": str(LEFT - 4), "y": str(TOP - 6), "width": str(RIGHT - LEFT + 8), "height": str(BOTTOM - TOP + 12),
    })  # fmt: skip
    grid = "".join(f"M{LEFT} {y.place(t):.1f}H{RIGHT}" for t in y.ticks)
    SubElement(svg, "path", {"class": "grid", "d": grid})
    marks = "".join(f"M{x.place(t):.1f} {BOTTOM}v5" for t in x.ticks)
    SubElement(svg, "path", {"class": "axis", "d": f"M{LEFT} {TOP}V{BOTTOM}H{RIGHT}{marks}"})
    for t in x.ticks:
        _text(svg, "text", x.label(t), {"class": "tick x", "x": f"{x.place(t):.1f}", "y": str(BOTTOM + 18)})
    for t in y.ticks:
        _text(svg, "text", y.label(t), {"class": "tick y", "x": str(LEFT - 7), "y": f"{y.place(t) + 4:.1f}"})
    middle = (TOP + BOTTOM) / 2
    _text(svg, "text", f"time / {plot.time_unit}", {
        "class": "name x", "x": str((LEFT + RIGHT) // 2), "y": str(HEIGHT - 8),
    })  # fmt: skip
    unit = f"({plot.value_unit})" if "/" in plot.value_unit else plot.value_unit
    _text(svg, "text", f"concentration / {unit}", {
        "class": "name x", "x": "14", "y": f"{middle:g}", "transform": f"rotate(-90 14 {middle:g})",
    })  # fmt: skip


def _one(
    area: Element, series: Series, times: Floats, values: Floats, spreads: Floats, x: Axis, y: Axis
) -> None:
    group = SubElement(area, "g", {"class": colour_class(series.position)})
    if series.model is not None and series.model_times is not None:
        SubElement(group, "path", {"class": "curve", "d": _curve(series.model_times, series.model, x, y)})
    bars = "".join(
        f"M{x.place(t):.1f} {y.place(v - u):.1f}V{y.place(v + u):.1f}"
        for t, v, u in zip(times, values, spreads, strict=True)
        if abs(y.place(v + u) - y.place(v)) > RADIUS  # a shorter one would be hidden by its marker
    )
    if bars:
        SubElement(group, "path", {"class": "bar", "d": bars})
    marker = shape(series.position)[1]
    points = "".join(marker(x.place(t), y.place(v), RADIUS) for t, v in zip(times, values, strict=True))
    SubElement(group, "path", {"class": "mark", "d": points})


def _curve(times: Floats, model: Floats, x: Axis, y: Axis) -> str:
    """The model's values joined; a gap where it has none."""
    far = 10.0 * (BOTTOM - TOP)  # keeps coordinates short where a curve runs away
    pieces, pen = [], "M"
    for t, v in zip(times, model, strict=True):
        if np.isfinite(v):
            pieces.append(f"{pen}{x.place(t):.1f} {min(max(y.place(v), -far), far):.1f}")
            pen = "L"
        else:
            pen = "M"
    return "".join(pieces)


def _key(svg: Element, plot: Plot) -> None:
    """Beside the plot: the marker and name of every series, and what the lines are."""
    left, row = RIGHT + 20, 20
    listed = plot.series if len(plot.series) <= MOST_IN_KEY else plot.series[: MOST_IN_KEY - 1]
    for i, series in enumerate(listed):
        middle = TOP + 6 + i * row
        group = SubElement(svg, "g", {"class": colour_class(series.position)})
        SubElement(group, "path", {"class": "mark", "d": shape(series.position)[1](left, middle, 4.0)})
        _text(group, "text", _short(series.name), {"class": "key", "x": str(left + 12), "y": str(middle + 4)})
    below = TOP + 6 + len(listed) * row
    if len(listed) < len(plot.series):
        _text(svg, "text", f"and {len(plot.series) - len(listed)} more", {
            "class": "key", "x": str(left + 12), "y": str(below + 4),
        })  # fmt: skip
    elif any(series.model is not None for series in plot.series):
        SubElement(svg, "path", {"class": "sample", "d": f"M{left - 6} {below}h12"})
        _text(svg, "text", "model", {"class": "key", "x": str(left + 12), "y": str(below + 4)})


def _short(name: str) -> str:
    return name if len(name) <= LONGEST_NAME else name[: LONGEST_NAME - 1] + "…"


def _text(parent: Element, tag: str, text: str, attributes: dict[str, str]) -> None:
    # Control characters may stand in names from old files, and not in a document.
    SubElement(parent, tag, attributes).text = "".join(c if c.isprintable() else " " for c in text)


def _finished(svg: Element) -> SafeString:
    return mark_safe(tostring(svg, encoding="unicode"))  # noqa: S308  ElementTree has escaped every text
