"""What a plot shows, in words: for those who do not see it, and where no script runs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.shown_numbers import plain

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Series:
    """One species or observable.

    Attributes
    ----------
    name : as in the table
    times, values : ndarray, shape (n,), in the plot's units; NaN is 'no value'
    model_times, model : ndarray, shape (k,), or None where there is no curve
    """

    name: str
    times: Floats
    values: Floats
    model_times: Floats | None = None
    model: Floats | None = None


@dataclass(frozen=True)
class Plot:
    """Several series over time."""

    series: Sequence[Series]
    time_unit: str
    value_unit: str
    model_name: str = ""


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
