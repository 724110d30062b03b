"""From constants, start concentrations and nuisance parameters to one vector on the fitted scale, and back.

Positive quantities are fitted as their natural logarithm, the others as they are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.problem import Constant, Experiment, Nuisance, Prior, StartConcentration
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.checked import start_name

Floats = NDArray[np.float64]
Ints = NDArray[np.intp]
Kind = Literal["constant", "start concentration", "nuisance"]

# Limit for a parameter without bounds that runs away because the data do not hold it.
FARTHEST = 1e9
# A positive parameter is followed this far from its start and no further, so that exp cannot overflow.
WIDEST_FACTOR = 1e15


@dataclass(frozen=True)
class FreeParameter:
    """One entry of the fitted vector.

    ``place`` is the group or the experiment it belongs to, None for all of them. ``start``, ``lower`` and
    ``upper`` are values; ``prior_mean`` and ``prior_sd`` are on the fitted scale.
    """

    name: str
    base: str
    kind: Kind
    place: str | None
    start: float
    positive: bool
    lower: float | None = None
    upper: float | None = None
    prior_mean: float | None = None
    prior_sd: float | None = None

    def fitted(self, value: float) -> float:
        return math.log(value) if self.positive else value

    def value(self, fitted: float) -> float:
        return math.exp(fitted) if self.positive else fitted

    @property
    def limits(self) -> tuple[float, float]:
        """Bounds on the fitted scale; where none is given a positive parameter may go `FARTHEST`-fold."""
        if not self.positive:
            return (
                -math.inf if self.lower is None else self.lower,
                math.inf if self.upper is None else self.upper,
            )
        centre, reach = math.log(self.start), math.log(FARTHEST)
        given = self.bounded
        lower = math.log(self.lower) if self.lower is not None and given[0] else centre - reach
        upper = math.log(self.upper) if self.upper is not None and given[1] else centre + reach
        return lower, upper

    @property
    def bounded(self) -> tuple[bool, bool]:
        """Whether the lower and the upper limit are bounds that were given, not just where the search ends."""
        lowest = 0.0 if self.positive else -math.inf
        return (
            self.lower is not None and self.lower > lowest,
            self.upper is not None and self.upper < math.inf,
        )

    @property
    def scale(self) -> float:
        """A typical step on the fitted scale; a prior may narrow it, a weak one does not widen it."""
        return self.size if self.prior_sd is None else min(self.prior_sd, self.size)

    @property
    def size(self) -> float:
        """A change that would matter, on the fitted scale, whatever the prior: e-fold, or as large as its start."""
        if self.positive:
            return 1.0
        return max(abs(self.start), 1e-3) if self.start or self.prior_sd is None else self.prior_sd


@dataclass(frozen=True, eq=False)
class Local:
    """Where one experiment finds its numbers in the fitted vector.

    Attributes
    ----------
    constants : ndarray of int, shape (len(network.constants),), position in the vector or -1 when held
    held : ndarray, shape as `constants`, the values of the held ones
    starts : species position -> position in the vector, for fitted start concentrations
    """

    constants: Ints
    held: Floats
    starts: dict[int, int]


class ParameterMap:
    """All free parameters of a fit and, for each experiment, where its numbers are."""

    def __init__(
        self,
        network: Network,
        experiments: Sequence[Experiment],
        constants: Sequence[Constant],
        starts: Sequence[StartConcentration],
        nuisances: Sequence[Nuisance],
    ) -> None:
        self._parameters: list[FreeParameter] = []
        self._at: dict[str, int] = {}
        by_name = {c.name: c for c in constants}
        ordered = [by_name[name] for name in network.constants]
        at = [[self._constant(c, e) for c in ordered] for e in experiments]
        held = [[held_value(c, e) for c in ordered] for e in experiments]
        fitted_starts = [self._starts(network, starts, experiments, e) for e in experiments]
        for nuisance in nuisances:
            factor = nuisance.kind == "factor"
            self._add(
                FreeParameter(
                    name=nuisance.name,
                    base=nuisance.name,
                    kind="nuisance",
                    place=None,
                    start=1.0 if factor else 0.0,
                    positive=factor,
                    prior_mean=0.0,
                    prior_sd=nuisance.sd,
                )
            )
        self.locals = tuple(
            Local(np.array(a, dtype=np.intp).reshape(-1), np.array(h, dtype=float), s)
            for a, h, s in zip(at, held, fitted_starts, strict=True)
        )
        self.parameters = tuple(self._parameters)

    def __len__(self) -> int:
        return len(self.parameters)

    def index(self, name: str) -> int:
        return self._at[name]

    @property
    def start(self) -> Floats:
        return np.array([p.fitted(p.start) for p in self.parameters])

    @property
    def bounds(self) -> tuple[Floats, Floats]:
        limits = np.array([p.limits for p in self.parameters]).reshape(-1, 2)
        return limits[:, 0], limits[:, 1]

    @property
    def bounded(self) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Whether each lower and each upper limit was given, shape (p,) each."""
        given = np.array([p.bounded for p in self.parameters], dtype=bool).reshape(-1, 2)
        return given[:, 0], given[:, 1]

    @property
    def scales(self) -> Floats:
        """A typical step of each parameter, shape (p,)."""
        return np.array([p.scale for p in self.parameters])

    @property
    def sizes(self) -> Floats:
        """A change of each parameter that would matter, shape (p,)."""
        return np.array([p.size for p in self.parameters])

    @property
    def constants(self) -> NDArray[np.bool_]:
        """Which of the parameters are constants of the mechanism, shape (p,)."""
        return np.array([p.kind == "constant" for p in self.parameters], dtype=bool)

    @property
    def positive(self) -> NDArray[np.bool_]:
        return np.array([p.positive for p in self.parameters], dtype=bool)

    @property
    def prior_means(self) -> Floats:
        return np.array([0.0 if p.prior_mean is None else p.prior_mean for p in self.parameters])

    @property
    def prior_sds(self) -> Floats:
        """Infinite where there is no prior."""
        return np.array([math.inf if p.prior_sd is None else p.prior_sd for p in self.parameters])

    def values(self, theta: Floats) -> Floats:
        """Values of all parameters at a point on the fitted scale."""
        return np.where(self.positive, np.exp(np.where(self.positive, theta, 0.0)), theta)

    def _add(self, parameter: FreeParameter) -> int:
        if parameter.name not in self._at:
            self._at[parameter.name] = len(self._parameters)
            self._parameters.append(parameter)
        return self._at[parameter.name]

    def _constant(self, constant: Constant, experiment: Experiment) -> int:
        if constant.scope == "held":
            return -1
        place = place_of(constant, experiment)
        mean, sd = _on_fitted_scale(constant.prior, constant.positive)
        return self._add(
            FreeParameter(
                name=constant.name if place is None else f"{constant.name} @ {place}",
                base=constant.name,
                kind="constant",
                place=place,
                start=start_value(constant, experiment),
                positive=constant.positive,
                lower=constant.lower,
                upper=constant.upper,
                prior_mean=mean,
                prior_sd=sd,
            )
        )

    def _starts(
        self,
        network: Network,
        starts: Sequence[StartConcentration],
        experiments: Sequence[Experiment],
        experiment: Experiment,
    ) -> dict[int, int]:
        found: dict[int, int] = {}
        for fitted in starts:
            charging = [e.name for e in experiments if any(c.species == fitted.species for c in e.charges)]
            if charging and experiment.name not in charging:
                continue  # a run without this species keeps its zero
            place = experiment.name if fitted.scope == "own per run" else None
            base = start_name(fitted.species)
            mean, sd = _on_fitted_scale(fitted.prior, True)
            found[network.species.index(fitted.species)] = self._add(
                FreeParameter(
                    name=base if place is None else f"{base} @ {place}",
                    base=base,
                    kind="start concentration",
                    place=place,
                    start=fitted.start,
                    positive=True,
                    lower=fitted.lower,
                    upper=fitted.upper,
                    prior_mean=mean,
                    prior_sd=sd,
                )
            )
        return found


def place_of(constant: Constant, experiment: Experiment) -> str | None:
    """The group or experiment that a constant belongs to in an experiment; None for all."""
    if constant.scope == "own per run":
        return experiment.name
    if constant.scope == "in a group":
        return experiment.groups[constant.group_by or ""]
    return None


def start_value(constant: Constant, experiment: Experiment) -> float:
    """Start of a constant in an experiment: its own, its group's, or the common one."""
    keys = start_keys(constant, [experiment])
    return next((constant.starts[key] for key in keys if key in constant.starts), constant.start)


def start_keys(constant: Constant, experiments: Sequence[Experiment]) -> list[str]:
    """Names in `Constant.starts` that mean something in these experiments, the most special first."""
    if constant.scope == "same in all runs":
        return []
    if constant.scope == "in a group":
        return list(dict.fromkeys(e.groups[constant.group_by or ""] for e in experiments))
    names = [e.name for e in experiments]
    return list(dict.fromkeys([*names, *(group for e in experiments for group in e.groups.values())]))


def held_value(constant: Constant, experiment: Experiment) -> float:
    """Value of a held constant; a free one gives its start."""
    return start_value(constant, experiment)


def _on_fitted_scale(prior: Prior | None, positive: bool) -> tuple[float | None, float | None]:
    if prior is None:
        return None, None
    return (math.log(prior.mean) if positive else prior.mean), prior.sd
