"""Smooth curves of a fit's model, computed again from its stored parameter values.

A result keeps its model at the measured times only. Between them the curve follows from the stored values through
the same equations; where it does not come out as it was stored, the stored values are given instead.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from django.core.cache import cache
from numpy.typing import NDArray

from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.fitting.residuals import ExperimentModel
from kinetics_db.engine.version import ENGINE_VERSION
from kinetics_db.fits.experiments import data_of, experiments_of
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.request import FitRequest
from kinetics_db.mechanisms.selectors import network_of

Floats = NDArray[np.float64]
logger = logging.getLogger(__name__)

SECONDS_A_RUN = 1.0
"""An integration that takes longer is given up: somebody waits for the page."""
SAME = 1e-5
"""Curves that differ by more than this share of the largest value are not those of the stored result."""
EARLY = 1e-4
"""A quarter of the grid lies evenly in ln(t) from this share of the run on, for fast beginnings and log axes."""
KEPT_SECONDS = 6 * 3600
MOST_KEPT = 32
KEPT = "fits.curves.kept"


@dataclass(frozen=True, eq=False)
class RunCurves:
    """A fit's model for one run.

    Attributes
    ----------
    name : the experiment's, which is the run's code; 'code (2)' for its second table
    run_id, table_id : the record's
    times : ndarray, shape (k,), s, increasing; holds every time of the fit
    observed_names : observables of the mechanism, length m
    values : ndarray, shape (k, m), mol/L or percent; NaN is 'no value'
    smooth : False where only the stored values at the measured times are given
    """

    name: str
    run_id: int
    table_id: int
    times: Floats
    observed_names: tuple[str, ...]
    values: Floats
    smooth: bool


def curves_of_fit(*, fit: Fit, result: FitResult, points: int = 120) -> tuple[RunCurves, ...]:
    """Model curves of every run of a finished fit, in the order of its dataset.

    Parameters
    ----------
    fit, result : a fit that the person may see (`fit_by_id`), and its result
    points : of the grid of each run, from the run's start to its last time; the times of the fit come on top

    Returns
    -------
    tuple of RunCurves
        Empty when the result has no curves, as with one that could not start.
    """
    key = f"fits.curves/{ENGINE_VERSION}/{fit.pk}/{result.digest}/{points}"
    found = _recalled(key)
    if found is None:
        found = _computed(fit, result.content, points)
        _remember(key, found)
    return found


def _computed(fit: Fit, content: Mapping[str, Any], points: int) -> tuple[RunCurves, ...]:
    stored = content["experiments"]
    if not stored:
        return ()
    request = FitRequest.from_plain(fit.content)
    data = data_of(fit.dataset)
    experiments, nuisances = experiments_of(data, request.casting, without_owners=request.without_owners)
    network = network_of(fit.mechanism_version)
    parameters = ParameterMap(
        network, experiments, request.constants, request.start_concentrations, nuisances
    )
    values = _values(parameters, content["parameters"])
    curves = []
    for item, experiment, local, kept in zip(data.items, experiments, parameters.locals, stored, strict=True):
        model = ExperimentModel(network, experiment, local, parameters)
        times, found, smooth = _one(model, values, request.settings, kept, points)
        run_id = item.run_revision.run_id
        names = tuple(kept["observed_names"])
        curves.append(RunCurves(kept["name"], run_id, item.table_id, times, names, found, smooth))
    return tuple(curves)


def _values(parameters: ParameterMap, stored: Sequence[Mapping[str, Any]]) -> Floats | None:
    """Values in the order of the map, shape (p,); None where one is not known."""
    by_name = {p["name"]: p["value"] for p in stored}
    values = [by_name.get(p.name) for p in parameters.parameters]
    return None if any(v is None for v in values) else np.array(values, dtype=float)


def _one(
    model: ExperimentModel, values: Floats | None, settings: Settings, kept: Mapping[str, Any], points: int
) -> tuple[Floats, Floats, bool]:
    """Times, signals, and whether they are a smooth curve."""
    measured = np.array(kept["times"], dtype=float)
    stored = np.array(kept["model"], dtype=float).reshape(measured.size, -1)
    if values is None or not measured.size:
        return measured, stored, False
    times = _grid(model.experiment.start_time, measured, points)
    found = model.curve(values, times, settings, SECONDS_A_RUN)
    if isinstance(found, str) or not _same(found[np.searchsorted(times, measured)], stored):
        return measured, stored, False
    return times, found, True


def _grid(start: float, measured: Floats, points: int) -> Floats:
    """Times from the run's start to its last measured one, with every measured one, increasing."""
    span = float(measured[-1]) - start
    if not span > 0.0:
        return np.unique(measured)
    early = points // 4
    evenly = np.linspace(start, measured[-1], max(points - early, 2))
    return np.unique(np.concatenate([evenly, start + span * np.geomspace(EARLY, 1.0, early), measured]))


def _same(found: Floats, stored: Floats) -> bool:
    """Whether a curve goes through the model as it was stored."""
    known = np.isfinite(stored)
    scale = float(np.max(np.abs(stored[known]), initial=0.0))
    return bool(np.all(np.abs(found[known] - stored[known]) <= SAME * scale))


def _recalled(key: str) -> tuple[RunCurves, ...] | None:
    try:
        return cache.get(key)
    except Exception:
        logger.warning("the cache does not answer; curves are computed", exc_info=True)
        return None


def _remember(key: str, curves: tuple[RunCurves, ...]) -> None:
    """Keep the newest few; a list in the cache tells which, and what it loses ends by its time."""
    try:
        kept = [*(k for k in cache.get(KEPT, ()) if k != key), key]
        cache.delete_many(kept[:-MOST_KEPT])
        cache.set(KEPT, kept[-MOST_KEPT:], KEPT_SECONDS)
        cache.set(key, curves, KEPT_SECONDS)
    except Exception:
        logger.warning("the cache does not answer; curves are not kept", exc_info=True)
