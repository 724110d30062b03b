"""Charts of a fit: points with the model's curves, and residuals, run by run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics_db.fits.curves import curves_of_fit
from kinetics_db.fits.experiments import reason_left_out, rows_in_window
from kinetics_db.web.present.charts import Chart, concentrations, positions_of, residuals
from kinetics_db.web.present.runs import units_of

if TYPE_CHECKING:
    from kinetics_db.fits.experiments import DataOfFit, RunOfFit
    from kinetics_db.fits.models import Fit, FitResult

CURVE_POINTS = 60


@dataclass(frozen=True, eq=False)
class RunCharts:
    """One run's charts; ``residuals`` is None where the result has no model."""

    points: Chart
    residuals: Chart | None
    smooth: bool
    """False where the model is known at the measured times only"""


def charts_of_runs(
    fit: Fit, result: FitResult, content: Mapping[str, Any], data: DataOfFit, chosen: Sequence[int]
) -> dict[int, RunCharts]:
    """Charts of chosen runs by their position in the dataset, counted from 1; all in the same units."""
    curves = dict(enumerate(curves_of_fit(fit=fit, result=result, points=CURVE_POINTS), start=1))
    experiments = dict(enumerate(content.get("experiments", ()), start=1))
    units = units_of((), [(item.table, run.table) for item, run in zip(data.items, data.runs, strict=True)])
    positions = positions_of(data.columns)
    casting = fit.content["casting"]["columns"]
    found = {}
    for position in chosen:
        run, name = data.runs[position - 1], data.names[position - 1]
        curve, experiment = curves.get(position), experiments.get(position)
        points = concentrations(
            run.table,
            basis=data.items[position - 1].table.basis,
            title=f"{name}: points and the curves of {fit.mechanism_version}",
            name=f"fit-{fit.pk}-{name}",
            units=units,
            positions=positions,
            curves=curve,
            casting=casting,
            left_out=left_out_of(run),
            model_name=str(fit.mechanism_version),
        )
        residual = experiment and residuals(
            experiment,
            title=f"{name}: residuals in standard uncertainties",
            name=f"fit-{fit.pk}-{name}-residuals",
            units=units,
            positions=positions,
            casting=casting,
        )
        found[position] = RunCharts(points, residual or None, curve is None or curve.smooth)
    return found


def left_out_of(run: RunOfFit) -> dict[str, list[int]]:
    """Rows of each column that the dataset leaves out, by its window or one by one."""
    outside = {int(row) for row in np.flatnonzero(~rows_in_window(run))}
    every = range(run.table.rows)
    found = {}
    for column in run.table.names("concentration"):
        if column not in run.columns:
            rows = list(every)
        elif run.window["left_out"]:
            rows = [row for row in every if row in outside or reason_left_out(run, column, row)]
        else:
            rows = sorted(outside)
        if rows:
            found[column] = rows
    return found
