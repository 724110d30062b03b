"""One set of constants fitted to many experiments at once."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.checks import check_fit
from kinetics_db.engine.fitting.descent import Descender, Descent
from kinetics_db.engine.fitting.objective import Objective
from kinetics_db.engine.fitting.outcome import FitOutcome
from kinetics_db.engine.fitting.parameters import ParameterMap
from kinetics_db.engine.fitting.problem import Constant, Experiment, Nuisance, Settings, StartConcentration
from kinetics_db.engine.fitting.report import report
from kinetics_db.engine.fitting.residuals import Data, Model
from kinetics_db.engine.fitting.starts import EndPoint, distinct_minima, start_points
from kinetics_db.engine.network.model import Network

Floats = NDArray[np.float64]
DEFAULT_SETTINGS = Settings()


def fit_globally(
    network: Network,
    experiments: Sequence[Experiment],
    constants: Sequence[Constant],
    *,
    start_concentrations: Sequence[StartConcentration] = (),
    nuisances: Sequence[Nuisance] = (),
    settings: Settings = DEFAULT_SETTINGS,
    on_progress: Callable[[int, float], None] | None = None,
    should_stop: Callable[[], bool] | None = None,
) -> FitOutcome:
    """Fit a network to experiments by minimising -2 ln L - 2 ln prior.

    -2 ln L = r' C^-1 r + ln det C over the points that have a value; prior densities are normal on the fitted
    scale, which is ln(value) for positive parameters. Sigmas that are not tabulated are profiled out.

    Parameters
    ----------
    network : Network
    experiments : what was measured; times in s, concentrations in one unit throughout
    constants : one for each name of `network.constants`
    start_concentrations : fitted instead of taken from the charges, in the experiments that charge the
        species (in all, when none does)
    nuisances : shared by every experiment whose charges, signals or clock name them
    settings : Settings
    on_progress : called with (iteration, cost) after each accepted iteration
    should_stop : asked between integrations; true ends the fit with status 'stopped' and its best point. It is
        asked on while the outcome is put together, so that the caller hears of work; the answer is idle then

    Returns
    -------
    FitOutcome
        Also when the fit does not converge, is stopped or cannot start; failed trial points make the search
        step back and never raise.

    Raises
    ------
    InvalidInput
        Naming everything that keeps the fit from starting.
    """
    check_fit(network, experiments, constants, start_concentrations, nuisances, settings)
    begun = time.monotonic()
    parameters = ParameterMap(network, experiments, constants, start_concentrations, nuisances)
    model = Model(
        network,
        experiments,
        parameters,
        settings,
        deadline=begun + settings.max_seconds,
        should_stop=should_stop,
    )
    objective = Objective(Data(experiments, settings), parameters)
    descender = Descender(model, objective, settings, on_progress)
    points = start_points(
        parameters, starts=settings.starts, spread=settings.start_spread, seed=settings.seed
    )
    best, ends = _descend(descender, points)
    on_work = None if should_stop is None else lambda: _ask(should_stop)
    return report(
        best,
        experiments,
        nuisances,
        objective,
        settings,
        minima=distinct_minima(ends, parameters, on_work) if settings.starts > 1 else (),
        iterations=descender.iterations,
        evaluations=model.evaluations,
        seconds=time.monotonic() - begun,
        on_work=on_work,
    )


def _ask(should_stop: Callable[[], bool]) -> None:
    """Let the caller hear of work; nothing is left to stop."""
    should_stop()


def _descend(descender: Descender, points: Iterator[Floats]) -> tuple[Descent, list[EndPoint]]:
    """The lowest end point of all starts, and where each that converged ended.

    Of the others only cost and place are kept, since a point carries its whole Jacobian. A stopped descent is
    the last one and keeps the fit 'stopped' whatever came before it.
    """
    best = latest = descender.descend(next(points))
    ends = _converged(latest)
    while latest.status != "stopped":
        theta = next(points, None)
        if theta is None:
            return best, ends
        latest = descender.descend(theta)
        ends += _converged(latest)
        best = _lower(best, latest)
    if best.status == "converged":
        message = f"{latest.message} before all starts were tried"
        best = Descent("stopped", message, best.point, best.iterations)
    return best, ends


def _converged(descent: Descent) -> list[EndPoint]:
    if descent.point is None or descent.status != "converged":
        return []
    return [EndPoint(descent.point.cost, descent.point.theta)]


def _lower(best: Descent, latest: Descent) -> Descent:
    """The descent that ended lower; where neither has a point, the first, or the one that was stopped."""
    if latest.point is None:
        return latest if best.point is None and latest.status == "stopped" else best
    return latest if best.point is None or latest.point.cost < best.point.cost else best
