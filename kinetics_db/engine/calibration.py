"""Signals to concentrations with standard uncertainties.

What differs from point to point (the noise of the signals) goes into the table's uncertainties by the law of
propagation (JCGM 100:2008, 5.1.2), or by Monte Carlo (JCGM 101:2008) where a signal is below ten times its
noise. What is wrong by one factor at all points (the standard's concentration, a response factor) is handed
over apart as `ScaleError`; in a covariance of the points it would pull a fit low.

Values are kept as measured: never clipped at zero, and a missing signal gives a missing concentration.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.recipes import (
    RECIPES,
    AsReported,
    InternalStandard,
    MeasuredSignal,
    Recipe,
    ReportedColumn,
    recipe_from_plain,
)
from kinetics_db.engine.tables import Column, Table
from kinetics_db.engine.units import convert, kind_of_unit
from kinetics_db.errors import InvalidInput, Problem

__all__ = [
    "RECIPES", "AsReported", "ConcentrationTableResult", "InternalStandard", "MeasuredSignal",
    "ReportedColumn", "ScaleError", "recipe_from_plain", "reduce", "reduce_internal_standard",
    "saturation_factor", "take_as_reported",
]  # fmt: skip

WEAK_SIGNAL = 10.0
MIN_POINTS_FOR_SCATTER = 8
MOST_DRAWN = 200_000_000  # weak readings times draws; some ten seconds

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class ScaleError:
    """One unknown factor on whole columns: its owner, relative standard uncertainty, and the columns."""

    owner: str
    relative_u: float
    columns: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class ConcentrationTableResult:
    """Concentrations and what is known about their errors.

    Attributes
    ----------
    table : 'time' in s, then 'concentration' columns, then their 'standard uncertainty' columns
    basis : 'mol/L', or 'relative' for percentages and fractions
    scale_errors : errors that are not in the table's uncertainties
    shared_relative_u : ndarray, shape (n,), or None; the part of the points' relative uncertainty that all
        columns have in common at one time, because they were divided by the same reading of the standard
    notes, warnings : what was done and what needs a look
    """

    table: Table
    basis: str
    scale_errors: tuple[ScaleError, ...] = ()
    shared_relative_u: Floats | None = None
    notes: tuple[str, ...] = ()
    warnings: tuple[Problem, ...] = ()


def reduce(signals: Table, recipe: Recipe) -> ConcentrationTableResult:
    """Apply a recipe of any kind."""
    if isinstance(recipe, InternalStandard):
        return reduce_internal_standard(signals, recipe)
    return take_as_reported(signals, recipe)


def saturation_factor(t1: float, repetition_time: float, flip_angle: float) -> float:
    """Part of the full signal that is left in the spoiled steady state of repeated pulses.

    Parameters
    ----------
    t1, repetition_time : s
    flip_angle : degrees

    Notes
    -----
    s = sin a (1 - E1) / (1 - E1 cos a), E1 = exp(-TR/T1): R. R. Ernst, W. A. Anderson, Rev. Sci. Instrum. 37
    (1966) 93. At 90 degrees it is 1 - E1.
    """
    e1 = math.exp(-repetition_time / t1)
    angle = math.radians(flip_angle)
    return math.sin(angle) * -math.expm1(-repetition_time / t1) / (1.0 - e1 * math.cos(angle))


def reduce_internal_standard(signals: Table, recipe: InternalStandard) -> ConcentrationTableResult:
    """Concentrations against an internal standard.

    Computes c_X = c_ref f_X (I_X/n_X)/(I_ref/n_ref) (s_ref/s_X) at every time.

    Parameters
    ----------
    signals : table with a 'time' column in s and the 'signal' columns that the recipe names

    Raises
    ------
    InvalidInput
        for a column that is absent, a standard's signal that is not above zero, signals in different units,
        too few points to estimate the noise, or too many weak points for the Monte Carlo.
    """
    _require_columns(signals, [s.signal for s in (recipe.standard, *recipe.signals)])
    _require_one_unit(signals, recipe)
    notes: list[str] = []
    standard = signals.column(recipe.standard.signal, "signal")
    _require_positive(signals, standard, recipe)
    noise = {s.signal: _noise(signals, s, recipe, notes) for s in (recipe.standard, *recipe.signals)}
    standard_noise = noise[recipe.standard.signal]
    factors = {s.signal: _saturation(s, recipe) for s in (recipe.standard, *recipe.signals)}
    generator = np.random.Generator(np.random.PCG64(recipe.seed))
    normal = generator.standard_normal((2, int(recipe.draws)))
    values, uncertainties, weak_points = [], [], 0
    for signal in recipe.signals:
        reading = signals.column(signal.signal, "signal")
        scale = (
            recipe.standard_concentration * signal.response_factor * recipe.standard.nuclei / signal.nuclei
        )
        scale *= factors[recipe.standard.signal][0] / factors[signal.signal][0]
        u = _propagated(reading, noise[signal.signal], standard, standard_noise)
        with np.errstate(invalid="ignore"):
            weak = (np.abs(reading) < WEAK_SIGNAL * noise[signal.signal]) | (
                standard < WEAK_SIGNAL * standard_noise
            )
        weak_at = np.flatnonzero(weak & np.isfinite(u))
        weak_points += weak_at.size
        if weak_points * recipe.draws > MOST_DRAWN:
            message = f"{weak_points} or more readings are below {WEAK_SIGNAL:g} times their noise"
            affordable = int(MOST_DRAWN // weak_points) // 1000 * 1000
            fewer = f", or {affordable} draws" if affordable >= 1000 else ""
            raise InvalidInput(message, field="signals", cure=f"average neighbouring readings first{fewer}")
        for i in weak_at:
            u[i] = _drawn(reading[i], noise[signal.signal][i], standard[i], standard_noise[i], normal)
        values.append(scale * (reading / standard))
        uncertainties.append(scale * u)
    if weak_points:
        notes.append(
            f"{weak_points} uncertainties by Monte Carlo ({recipe.draws} draws, seed {recipe.seed}), as a "
            f"signal is below {WEAK_SIGNAL:g} times its noise; half the width of the central 68.27 % interval"
        )
    with np.errstate(invalid="ignore"):
        shared = standard_noise / standard
    faint = np.flatnonzero(standard < 3 * standard_noise)
    warnings = [
        Problem(
            f"the standard's signal is below 3 times its noise at {signals.times[faint[0]]:g} s",
            field="standard", cure="flag these points", severity="warning",
        )
    ] if faint.size else []  # fmt: skip
    table = _table(signals, [s.species for s in recipe.signals], "mol/L", values, uncertainties)
    scale_errors = _scale_errors(recipe, factors)
    return ConcentrationTableResult(table, "mol/L", scale_errors, shared, tuple(notes), tuple(warnings))


def take_as_reported(signals: Table, recipe: AsReported) -> ConcentrationTableResult:
    """Concentrations, percentages or fractions as the file reports them, in stored units.

    Raises
    ------
    InvalidInput
        for a column that is absent or in no unit of concentration, or concentrations mixed with percentages.
    """
    names = [c.signal for c in recipe.columns]
    _require_columns(signals, names + [c.uncertainty_signal for c in recipe.columns if c.uncertainty_signal])
    units = [_reported_unit(signals, column) for column in recipe.columns]
    targets = {"mol/L" if kind_of_unit(u) == "concentration" else _relative_unit(u) for u in units}
    if len(targets) > 1:
        found = ", ".join(f"{c.signal} ({u})" for c, u in zip(recipe.columns, units, strict=True))
        raise InvalidInput(f"the columns are of different kinds: {found}", field="columns", cure="one kind")
    target = targets.pop()
    notes: list[str] = []
    values, uncertainties = [], []
    for column, unit in zip(recipe.columns, units, strict=True):
        reported = signals.column(column.signal, "signal")
        u = _reported_uncertainty(signals, column, reported, recipe)
        values.append(convert(reported, unit, target))
        uncertainties.append(convert(u, unit, target))
        if unit != target:
            notes.append(f"'{column.signal}' is converted from {unit} to {target}")
        if not np.isfinite(u).any():
            notes.append(f"no uncertainty is stated for '{column.signal}'; a fit has to estimate it")
    species = [c.species for c in recipe.columns]
    scale_errors = (
        (ScaleError(recipe.scale_owner, recipe.scale_relative_u, tuple(species)),)
        if recipe.scale_relative_u > 0 else ()
    )  # fmt: skip
    table = _table(signals, species, target, values, uncertainties)
    basis = "mol/L" if target == "mol/L" else "relative"
    return ConcentrationTableResult(table, basis, scale_errors, None, tuple(notes))


def _propagated(reading: Floats, noise: Floats, standard: Floats, standard_noise: Floats) -> Floats:
    """Standard uncertainty of reading/standard; holds at a reading of zero too."""
    u: Floats = np.hypot(noise / standard, reading / standard * (standard_noise / standard))
    return u


def _drawn(reading: float, noise: float, standard: float, standard_noise: float, normal: Floats) -> float:
    """Half the central 68.27 % interval of the ratio of two normal quantities.

    The standard deviation of such draws does not settle when the standard is weak, their quantiles do
    (JCGM 101:2008, 7.7).
    """
    ratio = (reading + noise * normal[0]) / (standard + standard_noise * normal[1])
    low, high = np.quantile(ratio, [0.158655253931457, 0.841344746068543])
    return float(high - low) / 2


def _noise(signals: Table, signal: MeasuredSignal, recipe: InternalStandard, notes: list[str]) -> Floats:
    """Standard uncertainty of each reading, shape (n,); missing where the reading is."""
    reading = signals.column(signal.signal, "signal")
    present = np.where(np.isnan(reading), np.nan, 1.0)
    if signal.noise is not None:
        return signal.noise * present
    if recipe.noise_absolute is None and recipe.noise_relative is None:
        scatter = _scatter(signals.times, reading)
        if scatter is None:
            raise InvalidInput(
                f"the noise of '{signal.signal}' cannot be estimated from its points",
                field="noise_absolute",
                cure=f"state the noise, or give {MIN_POINTS_FOR_SCATTER} points that scatter",
            )
        notes.append(f"noise of '{signal.signal}' estimated from its scatter about neighbours: {scatter:.3g}")
        return scatter * present
    relative = (recipe.noise_relative or 0.0) * np.abs(reading)
    noise: Floats = np.hypot((recipe.noise_absolute or 0.0) * present, relative)
    if not np.all(noise[np.isfinite(noise)] > 0):
        message = f"'{signal.signal}' has a reading of zero, whose relative noise is zero"
        raise InvalidInput(message, field="noise_absolute", cure="an absolute noise beside the relative one")
    return noise


def _scatter(times: Floats, reading: Floats) -> float | None:
    """Noise from the distance of each point to the line through its neighbours, by the median.

    Pseudo-residuals of T. Gasser, L. Sroka, C. Jennen-Steinmetz, Biometrika 73 (1986) 625; the median makes a
    few outliers harmless. Curvature between neighbours counts as noise, so sparse curves give an upper bound.
    """
    order = np.argsort(times)
    order = order[np.isfinite(reading[order])]
    t, y = times[order], reading[order]
    if t.size < MIN_POINTS_FOR_SCATTER:
        return None
    after = (t[1:-1] - t[:-2]) / (t[2:] - t[:-2])
    residuals = (y[1:-1] - (1 - after) * y[:-2] - after * y[2:]) / np.sqrt(1 + (1 - after) ** 2 + after**2)
    sigma = float(np.median(np.abs(residuals)) / 0.674489750196082)
    return sigma if sigma > 0 else None


def _saturation(signal: MeasuredSignal, recipe: InternalStandard) -> tuple[float, float]:
    """Saturation factor and its relative standard uncertainty."""
    if recipe.repetition_time is None or signal.t1 is None:
        return 1.0, signal.saturation_relative_u
    factor = saturation_factor(signal.t1, recipe.repetition_time, recipe.flip_angle)
    step = 1e-4 * signal.t1
    above = saturation_factor(signal.t1 + step, recipe.repetition_time, recipe.flip_angle)
    below = saturation_factor(signal.t1 - step, recipe.repetition_time, recipe.flip_angle)
    return factor, math.hypot(
        signal.saturation_relative_u, abs(above - below) / (2 * step) * signal.t1_u / factor
    )


def _scale_errors(
    recipe: InternalStandard, factors: dict[str, tuple[float, float]]
) -> tuple[ScaleError, ...]:
    species = tuple(s.species for s in recipe.signals)
    standard = recipe.standard
    errors = [
        ScaleError(recipe.standard_owner, recipe.standard_relative_u, species),
        ScaleError(f"saturation of {standard.species}", factors[standard.signal][1], species),
    ]
    for s in recipe.signals:
        errors.append(ScaleError(f"response factor of {s.species}", s.response_relative_u, (s.species,)))
        errors.append(ScaleError(f"saturation of {s.species}", factors[s.signal][1], (s.species,)))
    return tuple(e for e in errors if e.relative_u > 0)


def _reported_unit(signals: Table, column: ReportedColumn) -> str:
    unit = column.unit or signals.columns[signals.index(column.signal, "signal")].unit
    if not unit:
        message = f"column '{column.signal}' has no unit"
        raise InvalidInput(message, field="columns.unit", cure="state it in the recipe: such as mM, %, or 1")
    if kind_of_unit(unit) not in ("concentration", "relative"):
        message = f"column '{column.signal}' is in '{unit}', which is no concentration"
        raise InvalidInput(
            message, field="columns.unit", cure="a concentration, % or 1; else calibrate it first"
        )
    return unit


def _relative_unit(unit: str) -> str:
    return "percent" if convert(1.0, unit, "1") == 0.01 else "1"


def _reported_uncertainty(
    signals: Table, column: ReportedColumn, reported: Floats, recipe: AsReported
) -> Floats:
    present = np.where(np.isnan(reported), np.nan, 1.0)
    if column.uncertainty_signal is not None:
        u = signals.column(column.uncertainty_signal, "signal")
        if np.any(u <= 0):
            message = f"column '{column.uncertainty_signal}' holds an uncertainty that is not above zero"
            raise InvalidInput(message, field="columns.uncertainty_signal", cure="uncertainties above 0")
        return u * present
    if recipe.constant_u is None and recipe.relative_u is None:
        return np.full(reported.shape, np.nan)
    u = np.hypot((recipe.constant_u or 0.0) * present, (recipe.relative_u or 0.0) * reported)
    if np.any(u == 0):
        message = f"'{column.signal}' has a value of zero, whose relative uncertainty is zero"
        raise InvalidInput(message, field="constant_u", cure="a constant uncertainty beside the relative one")
    return u


def _require_columns(signals: Table, names: list[str]) -> None:
    known = signals.names("signal")
    problems = [
        Problem(f"there is no signal '{name}'", field="signal", cure="one of " + ", ".join(known[:20]))
        for name in dict.fromkeys(names)
        if name not in known
    ]
    times = [c for c in signals.columns if c.quantity == "time"]
    if len(times) != 1 or times[0].unit != "s":
        problems.append(Problem("the table needs one time column in s", field="time"))
    if problems:
        raise InvalidInput(problems)


def _require_one_unit(signals: Table, recipe: InternalStandard) -> None:
    units = {
        signals.columns[signals.index(s.signal, "signal")].unit for s in (recipe.standard, *recipe.signals)
    }  # fmt: skip
    if len(units) > 1:
        found = ", ".join(sorted(unit or "no unit" for unit in units))
        raise InvalidInput(f"the signals are in different units: {found}", field="signals", cure="one unit")


def _require_positive(signals: Table, standard: Floats, recipe: InternalStandard) -> None:
    wrong = np.flatnonzero(standard <= 0)
    if wrong.size:
        at = signals.times[wrong[0]]
        message = f"the standard's signal '{recipe.standard.signal}' is {standard[wrong[0]]:g} at {at:g} s"
        raise InvalidInput(message, field="standard.signal", cure="a signal above 0, or missing")


def _table(
    signals: Table, species: list[str], unit: str, values: list[Floats], uncertainties: list[Floats]
) -> Table:
    columns = (
        Column(signals.names("time")[0], "s", "time"),
        *(Column(name, unit, "concentration") for name in species),
        *(Column(name, unit, "standard uncertainty") for name in species),
    )
    return Table(columns, np.column_stack([signals.times, *values, *uncertainties]))
