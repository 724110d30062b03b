"""Computing a fit in a worker, and storing what came out."""

from __future__ import annotations

import math
import platform
import time
from dataclasses import asdict, dataclass
from importlib.metadata import version
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine import fit_globally
from kinetics_db.engine.fitting.outcome import ExperimentFit, FitOutcome, FittedParameter
from kinetics_db.engine.network import Network, constant_units
from kinetics_db.engine.version import ENGINE_VERSION
from kinetics_db.fits.experiments import DataOfFit, data_of, experiments_of
from kinetics_db.fits.models import Fit, FitResult, FittedConstant
from kinetics_db.fits.request import FitRequest
from kinetics_db.jobs import services as jobs
from kinetics_db.jobs.services import Claim
from kinetics_db.mechanisms.selectors import network_of
from kinetics_db.provenance.services import Prepared, save_record

RESULT_FORMAT = "ratewright/fit-result/1"
SECONDS_BETWEEN_HEARTBEATS = 0.5
LIBRARIES = ("numpy", "scipy")


@dataclass(frozen=True)
class Computed:
    """An outcome with what it was computed from."""

    fit: Fit
    request: FitRequest
    network: Network
    data: DataOfFit
    outcome: FitOutcome


class Pulse:
    """Turns the engine's progress into heartbeats; beats only when something has been done."""

    def __init__(self, claim: Claim):
        self.claim = claim
        self.iteration, self.cost = 0, math.inf
        self.beaten = 0.0
        self.stop = False

    def progress(self, iteration: int, cost: float) -> None:
        """Remember how far the fit is."""
        self.iteration, self.cost = iteration, cost

    def asked_to_stop(self) -> bool:
        """Beat when it is time to, and say whether somebody wants the fit stopped."""
        cost = f", cost {self.cost:.6g}" if math.isfinite(self.cost) else ""
        try:
            # How many iterations a fit will take nobody knows: the bar nears its end without claiming it.
            self._beat(1.0 - 0.9**self.iteration, f"iteration {self.iteration}{cost}", heed_stop=True)
        except jobs.StopAsked:
            self.stop = True
        return self.stop

    def judging(self) -> None:
        """Beat while the finished fit is judged; too late to stop."""
        self._beat(0.99, "judging the runs", heed_stop=False)

    def _beat(self, progress: float, message: str, *, heed_stop: bool) -> None:
        if time.monotonic() - self.beaten >= SECONDS_BETWEEN_HEARTBEATS:
            self.beaten = time.monotonic()
            jobs.heartbeat(self.claim, progress=progress, message=message, heed_stop=heed_stop)


def compute_fit(fit: Fit, pulse: Pulse) -> Computed:
    """Compute a fit as its request says; raises LeaseLost when another worker has taken over."""
    request = FitRequest.from_plain(fit.content)
    network = network_of(fit.mechanism_version)
    data = data_of(fit.dataset)
    experiments, nuisances = experiments_of(data, request.casting, without_owners=request.without_owners)
    outcome = fit_globally(
        network,
        experiments,
        request.constants,
        start_concentrations=request.start_concentrations,
        nuisances=nuisances,
        settings=request.settings,
        on_progress=pulse.progress,
        should_stop=pulse.asked_to_stop,
    )
    return Computed(fit, request, network, data, outcome)


def store_result(computed: Computed, content: Prepared, *, token: int) -> FitResult:
    """Store an outcome; must run inside `recording()` and the transaction that ends the job.

    ``content`` is `result_content`, prepared before the transaction began.
    """
    fit, outcome = computed.fit, computed.outcome
    units = _units(computed)
    result = save_record(
        FitResult(
            fit=fit,
            attempt=token,
            status=outcome.status,
            cost=number(outcome.cost),
            residual_sum=number(outcome.residual_sum_of_squares),
            seconds=outcome.seconds,
        ),
        user=fit.created_by,
        content=content,
        parents=[fit],
        project_id=fit.project_id,
        label=f"{fit.mechanism_version} on {fit.dataset}",
        verb="computed",
    )
    FittedConstant.objects.bulk_create(
        FittedConstant(
            result=result,
            name=p.name[:200],
            constant=p.base[:120],
            where=(p.place or "")[:120],
            value=number(p.value),
            standard_error=number(p.standard_error),
            low=number(p.lower),
            high=number(p.upper),
            unit=units.get(p.base, ""),
            determined=p.determined,
        )
        for p in outcome.parameters
        if p.kind in ("constant", "start concentration")
    )
    return result


def result_content(computed: Computed) -> dict[str, Any]:
    """Plain values of an outcome; what is not finite is null."""
    outcome = computed.outcome
    units = _units(computed)
    return {
        "format": RESULT_FORMAT,
        "fit": computed.fit.digest,
        "status": outcome.status,
        "message": outcome.message,
        "engine": ENGINE_VERSION,
        "libraries": {"python": platform.python_version(), **{name: version(name) for name in LIBRARIES}},
        "machine": platform.machine(),
        "cost": number(outcome.cost),
        "minus_two_log_likelihood": number(outcome.minus_two_log_likelihood),
        "minus_two_log_prior": number(outcome.minus_two_log_prior),
        "residual_sum_of_squares": number(outcome.residual_sum_of_squares),
        "weighted_residual_sum_of_squares": number(outcome.weighted_residual_sum_of_squares),
        "points": outcome.n_points,
        "degrees_of_freedom": number(outcome.degrees_of_freedom),
        "confidence": outcome.confidence,
        "quantile": number(outcome.quantile),
        "quantile_of": outcome.quantile_kind,
        "sigmas": [{k: number(v) for k, v in asdict(s).items()} for s in outcome.sigmas],
        "parameters": [_parameter(p, units) for p in outcome.parameters],
        "covariance": numbers(outcome.covariance),
        "pulls": [
            {
                "name": p.name,
                "owner": p.owner,
                "value": p.value,
                "pull": p.pull,
                "experiments": list(p.experiments),
            }
            for p in outcome.pulls
        ],
        "experiments": [_experiment(e) for e in outcome.experiments],
        "minima": [{"cost": m.cost, "found": m.found, "values": list(m.values)} for m in outcome.minima],
        "iterations": outcome.iterations,
        "evaluations": outcome.evaluations,
    }


def _units(computed: Computed) -> dict[str, str]:
    concentration = "mol/L" if computed.fit.dataset.basis == "mol/L" else "percent"
    units = constant_units(computed.network, concentration=concentration, time="s")
    return units | {f"[{name}]0": concentration for name in computed.network.species}


def _parameter(p: FittedParameter, units: dict[str, str]) -> dict[str, Any]:
    plain = {key: number(value) for key, value in asdict(p).items()}
    return {**plain, "unit": units.get(p.base, "")}


def _experiment(e: ExperimentFit) -> dict[str, Any]:
    return {
        "name": e.name,
        "times": numbers(e.times),
        "observed_names": list(e.observed_names),
        "observed": numbers(e.observed),
        "model": numbers(e.model),
        "sigma": numbers(e.sigma),
        "standardised": numbers(e.standardised),
    }


def number(value: Any) -> Any:
    """A finite float, or None; anything else as it is."""
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    return value


def numbers(values: NDArray[np.float64]) -> list[Any]:
    """Nested lists of an array, None where it is not finite."""
    if values.ndim > 1:
        return [numbers(row) for row in values]
    return [float(v) if math.isfinite(v) else None for v in values]
