"""The model at a point of the fit: signals of every experiment, their exact derivatives, and the data."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.parameters import WIDEST_FACTOR, Local, ParameterMap
from kinetics_db.engine.fitting.problem import Experiment, Settings
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.equations import equations_of
from kinetics_db.engine.simulation.reference import integrate

Floats = NDArray[np.float64]
# Bounds one integration. Progress is told between integrations, and who tells of none is taken for lost: this has
# to stay well below the lease of a background job.
INTEGRATION_SECONDS = 15.0


class InterruptedFitError(Exception):
    """Ends an evaluation because somebody asked or time is up; the fit keeps its best point."""


@dataclass(frozen=True, eq=False)
class Evaluation:
    """All experiments at one point.

    Attributes
    ----------
    theta : ndarray, shape (p,), fitted scale
    model : per experiment, ndarray, shape (n, m)
    jacobian : per experiment, ndarray, shape (n, m, p), d model / d theta
    failed, reason : experiment whose integration failed and why; None when all went well
    """

    theta: Floats
    model: tuple[Floats, ...] = ()
    jacobian: tuple[Floats, ...] = ()
    failed: str | None = None
    reason: str = ""


class Model:
    """The network under the conditions of each experiment, seen through its observables."""

    def __init__(
        self,
        network: Network,
        experiments: Sequence[Experiment],
        parameters: ParameterMap,
        settings: Settings,
        *,
        deadline: float,
        should_stop: Callable[[], bool] | None,
    ) -> None:
        self.parameters = parameters
        self.evaluations = 0
        self._deadline = deadline
        self._should_stop = should_stop
        self._settings = settings
        self._views = tuple(
            ExperimentModel(network, experiment, local, parameters)
            for experiment, local in zip(experiments, parameters.locals, strict=True)
        )
        self._centre = parameters.start
        self._positive = parameters.positive

    def evaluate(self, theta: Floats) -> Evaluation:
        """Signals and derivatives at theta. Raises InterruptedFitError between two integrations."""
        self.evaluations += 1
        reach = np.abs(theta - self._centre)[self._positive]
        if reach.size and reach.max() > math.log(WIDEST_FACTOR):
            at = int(np.flatnonzero(self._positive)[np.argmax(reach)])
            name = self.parameters.parameters[at].name
            return Evaluation(theta, failed="", reason=f"{name} went {WIDEST_FACTOR:g}-fold from its start")
        values = self.parameters.values(theta)
        models, jacobians = [], []
        for view in self._views:
            self.look_up()
            remaining = max(self._deadline - time.monotonic(), 1e-3)
            found = view.evaluate(values, self._settings, min(INTEGRATION_SECONDS, remaining))
            if isinstance(found, str):
                self.look_up()
                return Evaluation(theta, failed=view.experiment.name, reason=found)
            models.append(found[0])
            jacobians.append(found[1])
        return Evaluation(theta, tuple(models), tuple(jacobians))

    def look_up(self) -> None:
        """Raise InterruptedFitError when the fit is to stop or its time is up."""
        if self._should_stop is not None and self._should_stop():
            raise InterruptedFitError("stopped on request")
        if time.monotonic() > self._deadline:
            raise InterruptedFitError(f"the time limit of {self._settings.max_seconds:g} s was reached")


class ExperimentModel:
    """One experiment: from the values of all parameters to its signals and their derivatives."""

    def __init__(
        self, network: Network, experiment: Experiment, local: Local, parameters: ParameterMap
    ) -> None:
        self.network = network
        self.experiment = experiment
        self._local = local
        self._p = len(parameters)
        self._positive = parameters.positive
        self._free = np.flatnonzero(local.constants >= 0)
        self._at = local.constants[self._free]
        at_species = {name: i for i, name in enumerate(network.species)}
        self._weights = np.zeros((len(network.species), len(experiment.observed)))
        for column, name in enumerate(experiment.observed):
            for species, weight in network.observable_terms(name):
                self._weights[at_species[species], column] += weight
        self._charges = [
            (at_species[c.species], c.concentration, [parameters.index(f) for f in c.factors])
            for c in experiment.charges
            if at_species[c.species] not in local.starts
        ]
        scaled = {species for species, _, factors in self._charges if factors}
        self._wanted_starts = sorted(scaled | set(local.starts))
        self._signal_factors = [
            (column, [parameters.index(f) for f in experiment.signal_factors.get(name, ())])
            for column, name in enumerate(experiment.observed)
        ]
        self._shift = None if experiment.time_shift is None else parameters.index(experiment.time_shift)

    def evaluate(self, values: Floats, settings: Settings, max_seconds: float) -> tuple[Floats, Floats] | str:
        """Signals (n, m) and their derivatives (n, m, p), or why there are none."""
        experiment, local = self.experiment, self._local
        constants = local.held.copy()
        constants[self._free] = values[self._at]
        start, start_slopes = self._start(values)
        shift = 0.0 if self._shift is None else values[self._shift]
        times = np.maximum(experiment.times + shift, experiment.start_time)
        y, slopes, outcome = integrate(
            self.network,
            constants,
            start,
            times,
            temperature=experiment.temperature,
            wanted=self._free.tolist(),
            wanted_starts=self._wanted_starts,
            rtol=settings.rtol,
            max_steps=settings.max_steps,
            max_seconds=max_seconds,
            start_time=experiment.start_time,
        )
        if not outcome.ok:
            return outcome.message
        signal = y @ self._weights
        jacobian = np.zeros((*signal.shape, self._p))
        by_local = np.einsum("nsq,sm->nmq", slopes, self._weights)
        n_free = len(self._free)
        # positive parameters move as logarithms: d/d ln(x) = x d/dx
        step = np.where(self._positive, values, 1.0)
        jacobian[:, :, self._at] += by_local[:, :, :n_free] * step[self._at]
        for column, species in enumerate(self._wanted_starts, start=n_free):
            for parameter, slope in start_slopes[species].items():
                jacobian[:, :, parameter] += by_local[:, :, column] * slope
        if self._shift is not None:
            jacobian[:, :, self._shift] += self._rates(y, constants, times) @ self._weights
        for column, factors in self._signal_factors:
            gain = math.prod(values[f] for f in factors)
            signal[:, column] *= gain
            jacobian[:, column, :] *= gain
            for factor in factors:
                jacobian[:, column, factor] += signal[:, column]
        return signal, jacobian

    def curve(self, values: Floats, times: Floats, settings: Settings, max_seconds: float) -> Floats | str:
        """Signals at any times of the experiment's clock, shape (k, m), without derivatives; or why not."""
        experiment = self.experiment
        constants = self._local.held.copy()
        constants[self._free] = values[self._at]
        shift = 0.0 if self._shift is None else values[self._shift]
        y, _, outcome = integrate(
            self.network,
            constants,
            self._start(values)[0],
            np.maximum(times + shift, experiment.start_time),
            temperature=experiment.temperature,
            rtol=settings.rtol,
            max_steps=settings.max_steps,
            max_seconds=max_seconds,
            start_time=experiment.start_time,
        )
        if not outcome.ok:
            return outcome.message
        signal = y @ self._weights
        for column, factors in self._signal_factors:
            signal[:, column] *= math.prod(values[f] for f in factors)
        return signal

    def _start(self, values: Floats) -> tuple[Floats, dict[int, dict[int, float]]]:
        """Start concentrations and, by species, their derivatives to the fitted scale of the parameters."""
        start = np.zeros(len(self.network.species))
        slopes: dict[int, dict[int, float]] = {species: {} for species in self._wanted_starts}
        for species, concentration, factors in self._charges:
            contribution = concentration * math.prod(values[f] for f in factors)
            start[species] += contribution
            for factor in factors:
                slopes[species][factor] = slopes[species].get(factor, 0.0) + contribution
        for species, parameter in self._local.starts.items():
            start[species] = values[parameter]
            slopes[species][parameter] = float(values[parameter])
        return start, slopes

    def _rates(self, y: Floats, constants: Floats, times: Floats) -> Floats:
        bound = equations_of(self.network).bind(constants, temperature=self.experiment.temperature)
        rates = np.array([bound.rates(row).copy() for row in y]).reshape(y.shape)
        rates[times <= self.experiment.start_time] = 0.0  # before the run begins nothing moves
        return rates


class Data:
    """The valid points of all experiments as one vector, and which sigma each of them has.

    Attributes
    ----------
    observed, tabulated : ndarray, shape (v,)
    groups : ndarray of int, shape (v,), position in `group_names`; zeros when tabulated
    group_names : observables with a sigma of their own, (None,) for a common one, () when tabulated
    masks : per experiment, ndarray of bool, shape (n, m)
    """

    def __init__(self, experiments: Sequence[Experiment], settings: Settings) -> None:
        self.masks = tuple(valid_points(e, settings) for e in experiments)
        self.observed = _joined([e.values[mask] for e, mask in zip(experiments, self.masks, strict=True)])
        self.sizes = [int(mask.sum()) for mask in self.masks]
        names: list[str] = []
        for e, mask in zip(experiments, self.masks, strict=True):
            names += [e.observed[column] for column in np.nonzero(mask)[1]]
        self.group_names: tuple[str | None, ...] = ()
        self.groups = np.zeros(len(names), dtype=np.intp)
        self.tabulated = np.ones(len(names))
        if settings.error_model == "as tabulated":
            self.tabulated = _joined(
                [
                    e.sigma[mask]
                    for e, mask in zip(experiments, self.masks, strict=True)
                    if e.sigma is not None
                ]
            )
        elif settings.error_model == "one sigma":
            self.group_names = (None,)
        else:
            self.group_names = tuple(dict.fromkeys(names))
            position = {name: i for i, name in enumerate(self.group_names)}
            self.groups = np.array([position[name] for name in names], dtype=np.intp)
        # what an integration at this tolerance cannot tell from a perfect fit
        groups = [self.observed[self.groups == g] for g in range(len(self.group_names))]
        size = np.array([np.sqrt(np.mean(values**2)) for values in groups])
        largest = float(size.max(initial=0.0)) or 1.0
        self.smallest_sigmas = 100 * settings.rtol * np.maximum(size, 1e-3 * largest)

    @property
    def n(self) -> int:
        return len(self.observed)

    def flat(self, tables: Sequence[Floats]) -> Floats:
        """Valid points of one table per experiment, shape (v, ...)."""
        return _joined([table[mask] for table, mask in zip(tables, self.masks, strict=True)])

    def sigma_of_points(self, sigmas: Floats) -> Floats:
        """Sigma of every valid point, shape (v,), from those of the groups."""
        return self.tabulated if not self.group_names else sigmas[self.groups]

    def best_sigmas(self, residuals: Floats) -> Floats:
        """Maximum-likelihood sigma of each group, sqrt(RSS / n), shape (g,)."""
        g = len(self.group_names)
        counts = np.maximum(np.bincount(self.groups, minlength=g)[:g], 1)
        sums = np.bincount(self.groups, weights=residuals**2, minlength=g)[:g]
        return np.asarray(np.maximum(np.sqrt(sums / counts), self.smallest_sigmas))


def valid_points(experiment: Experiment, settings: Settings) -> NDArray[np.bool_]:
    """Points that take part: a value, and a tabulated sigma where that is the error model."""
    valid = np.isfinite(experiment.values)
    if settings.error_model == "as tabulated" and experiment.sigma is not None:
        valid = valid & np.isfinite(experiment.sigma)
    return np.asarray(valid)


def _joined(parts: Sequence[Floats]) -> Floats:
    return np.concatenate(parts) if parts else np.zeros(0)
