"""The question put to a global fit, as plain values: experiments, constants, nuisances, settings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Charge:
    """A contribution to the start concentration of a species: c0 += concentration * product(factors).

    ``factors`` are names of nuisance parameters (weighing, stock, lot, volume) whose value multiplies this
    contribution. A `StartConcentration` of the species replaces all its charges.
    """

    species: str
    concentration: float  # mol/L, or the unit of the table for relative tables
    factors: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Experiment:
    """One run as the engine sees it.

    Attributes
    ----------
    name : str, unique in the fit
    charges : contributions to the start concentrations; species without any begin at zero
    times : ndarray, shape (n,), s, increasing; the run starts at ``start_time``
    observed : names of observables (or species) of the network, length m
    values : ndarray, shape (n, m); NaN is 'no value'
    sigma : ndarray, shape (n, m), standard uncertainties of the points, or None where none are tabulated
    temperature : K, or None when unknown
    signal_factors : per observed name, nuisance parameters whose value multiplies the modelled signal
    groups : value of each grouping key, e.g. {'temperature': '298.15 K'}
    owner : owner of the nuisance parameters that are this run's own; by default its name
    """

    name: str
    charges: tuple[Charge, ...]
    times: NDArray[np.float64]
    observed: tuple[str, ...]
    values: NDArray[np.float64]
    sigma: NDArray[np.float64] | None = None
    temperature: float | None = None
    start_time: float = 0.0
    signal_factors: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    time_shift: str | None = None
    groups: Mapping[str, str] = field(default_factory=dict)
    owner: str = ""


@dataclass(frozen=True)
class Prior:
    """Normal prior on the fitted scale: on ln(value) for positive parameters, else on the value.

    ``mean`` is given as a value (not its logarithm); ``sd`` is on the fitted scale.
    """

    mean: float
    sd: float


Scope = Literal["same in all runs", "in a group", "own per run", "held"]


@dataclass(frozen=True)
class Constant:
    """How one constant of the network enters the fit. Bounds and start are values, not logarithms.

    ``positive`` constants move on a log scale. ``group_by`` is a key of `Experiment.groups` for scope
    'in a group'. ``starts`` may give single groups or experiments their own start value.
    """

    name: str
    start: float
    scope: Scope = "same in all runs"
    lower: float | None = None
    upper: float | None = None
    prior: Prior | None = None
    group_by: str | None = None
    starts: Mapping[str, float] = field(default_factory=dict)
    positive: bool = True


@dataclass(frozen=True)
class StartConcentration:
    """A start concentration to be fitted instead of taken from the charges.

    It is fitted in every experiment that charges the species, or in all of them when none does, and replaces
    all charges of that species there.
    """

    species: str
    start: float
    scope: Scope = "own per run"
    lower: float | None = None
    upper: float | None = None
    prior: Prior | None = None


@dataclass(frozen=True)
class Nuisance:
    """An unknown with a prior, owned by its cause and shared by every run that used it.

    kind 'factor': multiplies charges or signals, prior ln(value) ~ N(0, sd).
    kind 'time shift': s, added to the experiment's clock, prior value ~ N(0, sd).
    """

    name: str
    owner: str
    sd: float
    kind: Literal["factor", "time shift"] = "factor"


ErrorModel = Literal["as tabulated", "one sigma", "one sigma per observable"]


@dataclass(frozen=True)
class Settings:
    """How to fit. Tolerances are relative; `max_seconds` bounds the fit, `max_steps` one integration."""

    error_model: ErrorModel = "as tabulated"
    rtol: float = 1e-8
    starts: int = 1
    seed: int = 1
    start_spread: float = 10.0  # further starts lie within this factor of the first
    max_iterations: int = 200
    max_steps: int = 20_000
    max_seconds: float = 900.0
    confidence: float = 0.95
