"""One set of constants fitted to many experiments at once."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence

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
from kinetics_db.engine.fitting.starts import distinct_minima, start_points
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
    should_stop : asked between integrations; true ends the fit with status 'stopped' and its best point

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
    descents: list[Descent] = []
    points = start_points(
        parameters, starts=settings.starts, spread=settings.start_spread, seed=settings.seed
    )
    for theta in points:
        descents.append(descender.descend(theta))
        if descents[-1].status == "stopped":
            break
    return report(
        _best(descents),
        experiments,
        nuisances,
        objective,
        settings,
        minima=distinct_minima(descents, parameters) if settings.starts > 1 else (),
        iterations=descender.iterations,
        evaluations=model.evaluations,
        seconds=time.monotonic() - begun,
    )


def _best(descents: Sequence[Descent]) -> Descent:
    """The lowest end point; a stopped descent keeps the fit 'stopped' whatever came before it."""
    with_point = [d for d in descents if d.point is not None]
    if not with_point:
        return descents[-1] if descents[-1].status == "stopped" else descents[0]
    best = min(with_point, key=lambda d: d.point.cost if d.point is not None else np.inf)
    last = descents[-1]
    if last.status == "stopped" and best.status == "converged":
        return Descent("stopped", f"{last.message} before all starts were tried", best.point, best.iterations)
    return best
