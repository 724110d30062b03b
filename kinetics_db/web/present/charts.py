"""Charts as the plain JSON that static/web/charts.js draws, in the units of the page.

``{"kind", "title", "name", "time_unit", "value_unit", "model_name", "thinned", "x", "model_x", "series": [...]}``; each
series has ``name``, ``position``, ``x``, ``y``, ``u``, ``left_out`` and ``model`` (``{"x", "y"}`` or null). Where all
series share their times these stand once, as the chart's ``x`` and ``model_x``, and are null in the series.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.tables import Table
from kinetics_db.fits.curves import RunCurves
from kinetics_db.web.plots import Plot, Series, describe
from kinetics_db.web.present.units import PERCENT, Units, factor

Floats = NDArray[np.float64]
Casting = Mapping[str, str | None]
DIGITS = 7
MODEL_DIGITS = 5  # a line is not read closer than it is drawn
MOST_POINTS = 1000
"""More points of a series than this are thinned out evenly; the CSV has them all."""


@dataclass(frozen=True, eq=False)
class ChartSeries:
    """One species or observable, in the chart's units.

    Attributes
    ----------
    name : as in the table
    position : which colour and marker it has (`positions_of`)
    x, y : ndarray, shape (n,); NaN is 'no value'
    u : ndarray, shape (n,), standard uncertainties, or None where none are known
    left_out : rows of x and y that the dataset leaves out
    model_x, model_y : ndarray, shape (k,), or None where there is no curve
    """

    name: str
    position: int
    x: Floats
    y: Floats
    u: Floats | None = None
    left_out: Collection[int] = ()
    model_x: Floats | None = None
    model_y: Floats | None = None


@dataclass(frozen=True, eq=False)
class Chart:
    """Several series over time; ``name`` is what its downloads are called."""

    kind: Literal["concentrations", "residuals", "signals"]
    title: str
    name: str
    time_unit: str
    value_unit: str
    series: Sequence[ChartSeries]
    model_name: str = ""

    def to_plain(self) -> dict[str, Any]:
        """What charts.js reads."""
        drawn = [_thinned(series) for series in self.series]
        return {
            "kind": self.kind,
            "title": self.title,
            "name": self.name,
            "time_unit": self.time_unit,
            "value_unit": self.value_unit,
            "model_name": self.model_name,
            "thinned": any(len(a.x) < len(b.x) for a, b in zip(drawn, self.series, strict=True)),
            **_with_shared_times([_plain(series) for series in drawn]),
        }

    @property
    def words(self) -> str:
        """What the chart shows, for those who do not see it."""
        series = [Series(s.name, s.x, s.y, model_times=s.model_x, model=s.model_y) for s in self.series]
        plot = Plot(series, self.time_unit, self.value_unit, self.model_name)
        return describe(plot)


def concentrations(
    table: Table,
    *,
    basis: str,
    title: str,
    name: str,
    units: Units,
    positions: Mapping[str, int],
    curves: RunCurves | None = None,
    casting: Casting | None = None,
    left_out: Mapping[str, Collection[int]] | None = None,
    model_name: str = "",
) -> Chart:
    """A stored table's concentrations, and a fit's curves over them.

    Parameters
    ----------
    table, basis : of a concentration table
    title, name : the heading, and what a download is called
    units : of the page
    positions : column -> its colour and marker (`positions_of`); others come after these
    curves : of the same table (`fits.curves.curves_of_fit`)
    casting : column -> observable of the mechanism; by default columns are called as observables are
    left_out : column -> rows that the fit's dataset leaves out
    """
    unit, seconds = units.concentration_of(basis), factor("s", units.time)
    known = table.names("standard uncertainty")
    places = _places(table.names("concentration"), positions)
    series = []
    for column in (c for c in table.columns if c.quantity == "concentration"):
        scale = factor(column.unit or "1", unit)
        has_u = column.name in known
        observable = column.name if casting is None else casting.get(column.name)
        model = _model_of(curves, observable)
        series.append(
            ChartSeries(
                name=column.name,
                position=places[column.name],
                x=table.times * seconds,
                y=table.column(column.name, "concentration") * scale,
                u=table.column(column.name, "standard uncertainty") * scale if has_u else None,
                left_out=(left_out or {}).get(column.name, ()),
                model_x=None if curves is None or model is None else curves.times * seconds,
                # Fractions are fitted as percent, whatever the table's own unit is.
                model_y=None if model is None else model * factor(_fitted_unit(basis), unit),
            )
        )
    return Chart("concentrations", title, name_of(name), units.time, unit, series, model_name)


def simulated(
    curves: Mapping[str, tuple[Floats, Floats]],
    *,
    basis: str,
    title: str,
    name: str,
    units: Units,
    positions: Mapping[str, int],
    model_name: str = "",
) -> Chart:
    """Curves without points: name -> times in s and values in mol/L (percent for relative ones)."""
    unit, seconds = units.concentration_of(basis), factor("s", units.time)
    scale, nothing = factor(_fitted_unit(basis), unit), np.zeros(0)
    places = _places(curves, positions)
    series = [
        ChartSeries(
            name=curve,
            position=places[curve],
            x=nothing,
            y=nothing,
            model_x=np.asarray(times) * seconds,
            model_y=np.asarray(values) * scale,
        )
        for curve, (times, values) in curves.items()
    ]
    return Chart("concentrations", title, name_of(name), units.time, unit, series, model_name)


def residuals(
    experiment: Mapping[str, Any],
    *,
    title: str,
    name: str,
    units: Units,
    positions: Mapping[str, int],
    casting: Casting | None = None,
) -> Chart:
    """Standardised residuals of one experiment of a stored result (``content['experiments'][i]``).

    With a casting each observable is called as its column, so that it has the colour of its points.
    """
    columns = {observable: column for column, observable in (casting or {}).items() if observable}
    times = np.array(experiment["times"], dtype=float) * factor("s", units.time)
    names = [columns.get(observable, observable) for observable in experiment["observed_names"]]
    values = np.array(experiment["standardised"], dtype=float).reshape(times.size, len(names))
    places = _places(names, positions)
    series = [ChartSeries(column, places[column], times, values[:, i]) for i, column in enumerate(names)]
    return Chart("residuals", title, name_of(name), units.time, "", series)


def positions_of(names: Iterable[str]) -> dict[str, int]:
    """Colour and marker by name, in order of first appearance.

    What was measured, in the order of the tables: a species then looks the same wherever tables of one kind stand.
    """
    return {name: i for i, name in enumerate(dict.fromkeys(names))}


def name_of(text: str) -> str:
    """A text as the stem of a file's name: 'Run K01, table 2' is 'Run-K01-table-2'."""
    return re.sub(r"[^\w.-]+", "-", text, flags=re.ASCII).strip("-.")[:80] or "chart"


def rounded(values: Floats, digits: int = DIGITS) -> list[float | int | None]:
    """Numbers with that many significant digits, None where there is none; whole ones as such."""
    return [_number(value, digits) for value in np.asarray(values, dtype=float).tolist()]


def _number(value: float, digits: int) -> float | int | None:
    if not math.isfinite(value):
        return None
    short = float(f"{value:.{digits}g}")
    return int(short) if short.is_integer() and abs(short) < 1e15 else short


def _places(names: Iterable[str], positions: Mapping[str, int]) -> dict[str, int]:
    """Positions of the names; those without one come after all that have one."""
    new = (name for name in dict.fromkeys(names) if name not in positions)
    first = max(positions.values(), default=-1) + 1
    return {**positions, **{name: i for i, name in enumerate(new, start=first)}}


def _fitted_unit(basis: str) -> str:
    return "mol/L" if basis == "mol/L" else PERCENT


def _model_of(curves: RunCurves | None, observable: str | None) -> Floats | None:
    if curves is None or observable not in curves.observed_names:
        return None
    return curves.values[:, curves.observed_names.index(observable)]


def _plain(series: ChartSeries) -> dict[str, Any]:
    has_u = series.u is not None and bool(np.isfinite(series.u).any())
    model = None
    if series.model_x is not None and series.model_y is not None:
        model = {"x": rounded(series.model_x, MODEL_DIGITS), "y": rounded(series.model_y, MODEL_DIGITS)}
    return {
        "name": series.name,
        "position": series.position,
        "x": rounded(series.x),
        "y": rounded(series.y),
        "u": rounded(series.u) if has_u and series.u is not None else None,
        "left_out": sorted(series.left_out),
        "model": model,
    }


def _with_shared_times(series: list[dict[str, Any]]) -> dict[str, Any]:
    """Times that all series have in common stand once, since they are much of what a page weighs."""
    shared: dict[str, Any] = {"x": None, "model_x": None}
    if series and all(s["x"] == series[0]["x"] for s in series):
        shared["x"] = series[0]["x"]
        series = [{**s, "x": None} for s in series]
    models = [s["model"] for s in series if s["model"] is not None]
    if models and all(m["x"] == models[0]["x"] for m in models):
        shared["model_x"] = models[0]["x"]
        series = [{**s, "model": s["model"] and {**s["model"], "x": None}} for s in series]
    return {**shared, "series": series}


def _thinned(series: ChartSeries) -> ChartSeries:
    n = len(series.x)
    if n <= MOST_POINTS:
        return series
    keep = np.linspace(0, n - 1, MOST_POINTS).round().astype(int)
    at = {int(row): i for i, row in enumerate(keep)}
    return replace(
        series,
        x=series.x[keep],
        y=series.y[keep],
        u=None if series.u is None else series.u[keep],
        left_out=[at[row] for row in series.left_out if row in at],
    )
