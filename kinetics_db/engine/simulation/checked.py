"""What a simulation is asked for, checked and brought into arrays."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kinetics_db.engine.conditions import Conditions
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.equations import equations_of
from kinetics_db.errors import InvalidInput, Problem

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Checked:
    """Arrays in the order of the network; `column_order` restores the order asked for."""

    constants: Floats
    start: Floats
    times: Floats
    temperature: float | None
    atol: Floats | None
    wanted_constants: tuple[int, ...]
    wanted_starts: tuple[int, ...]
    column_order: tuple[int, ...]


def start_name(species: str) -> str:
    """Name of the start concentration of a species as a parameter."""
    return f"[{species}]0"


def check_simulation(
    network: Network,
    constants: Mapping[str, float],
    start: Mapping[str, float],
    times: ArrayLike,
    conditions: Conditions | None,
    *,
    rtol: float,
    atol: float | Mapping[str, float] | None,
    sensitivities_to: Sequence[str],
    max_steps: int,
    max_seconds: float,
    start_time: float,
) -> Checked:
    """Arrays of a simulation; InvalidInput names everything that cannot be used."""
    problems: list[Problem] = []
    values = _named(problems, constants, network.constants, "constant", missing=True)
    start_values = _named(problems, start, network.species, "species", missing=False)
    for name, value in start.items():
        if name in network.species and value < 0:
            problems.append(Problem(f"start concentration {value:g} of {name} is negative", field="start"))
    t = np.asarray(times, dtype=float)
    if t.ndim != 1:
        problems.append(Problem("times are not a list of numbers", field="times"))
    elif not np.isfinite(t).all():
        problems.append(Problem("times hold a value that is not finite", field="times"))
    elif np.any(np.diff(t) < 0):
        position = int(np.argmax(np.diff(t) < 0))
        problems.append(
            Problem(
                f"time {t[position + 1]:g} s follows {t[position]:g} s",
                field="times",
                cure="increasing times",
            )
        )
    elif t.size and t[0] < start_time:
        problems.append(
            Problem(f"time {t[0]:g} s is before the run starts at {start_time:g} s", field="times")
        )
    temperature = conditions.temperature if conditions is not None else None
    if temperature is None:
        if equations_of(network).needs_temperature:
            problems.append(Problem("the mechanism uses T and no temperature is given", field="conditions"))
    elif not (math.isfinite(temperature) and temperature > 0):
        problems.append(Problem(f"temperature {temperature:g} K", field="conditions", cure="above 0 K"))
    if not 1e-13 <= rtol <= 0.1:
        problems.append(Problem(f"relative tolerance {rtol:g}", field="rtol", cure="1e-13 to 0.1"))
    absolute = _absolute(problems, atol, network)
    if not (max_steps >= 1 and max_seconds > 0):
        problems.append(Problem("bounds on steps and seconds must be positive", field="max_steps"))
    wanted_constants, wanted_starts, order = _columns(problems, network, sensitivities_to)
    if problems:
        raise InvalidInput(problems)
    return Checked(values, start_values, t, temperature, absolute, wanted_constants, wanted_starts, order)


def _named(
    problems: list[Problem], given: Mapping[str, float], known: tuple[str, ...], kind: str, *, missing: bool
) -> Floats:
    field = "constants" if kind == "constant" else "start"
    for name, value in given.items():
        if name not in known:
            cure = "one of " + ", ".join(known) if known else f"the mechanism has no {kind}"
            problems.append(Problem(f"the mechanism has no {kind} {name}", field=field, cure=cure))
        elif not math.isfinite(value):
            problems.append(Problem(f"value {value} of {name} is not finite", field=field))
    if missing:
        problems.extend(
            Problem(f"constant {name} has no value", field=field) for name in known if name not in given
        )
    return np.array([float(given.get(name, 0.0)) for name in known])


def _absolute(
    problems: list[Problem], atol: float | Mapping[str, float] | None, network: Network
) -> Floats | None:
    if atol is None:
        return None
    if isinstance(atol, Mapping):
        problems += [
            Problem(f"the mechanism has no species {name}", field="atol")
            for name in atol
            if name not in network.species
        ]
        problems += [
            Problem(f"no absolute tolerance for {name}", field="atol")
            for name in network.species
            if name not in atol
        ]
        array = np.array([float(atol.get(name, 1.0)) for name in network.species])
    else:
        array = np.full(len(network.species), float(atol))
    if not (np.isfinite(array).all() and (array > 0).all()):
        problems.append(Problem("absolute tolerances must be positive", field="atol"))
    return array


def _columns(
    problems: list[Problem], network: Network, names: Sequence[str]
) -> tuple[tuple[int, ...], tuple[int, ...], tuple[int, ...]]:
    starts = {start_name(species): i for i, species in enumerate(network.species)}
    cure = "a constant of the mechanism that is not computed, or [X]0"
    problems += [
        Problem(f"no constant or start concentration {name}", field="sensitivities_to", cure=cure)
        for name in names
        if name not in network.constants and name not in starts
    ]
    constants = tuple(dict.fromkeys(n for n in names if n in network.constants))
    species = tuple(dict.fromkeys(n for n in names if n in starts and n not in network.constants))
    position = {name: i for i, name in enumerate(constants + species)}
    return (
        tuple(network.constants.index(name) for name in constants),
        tuple(starts[name] for name in species),
        tuple(position[name] for name in names if name in position),
    )
