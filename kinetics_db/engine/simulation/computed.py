"""Computed constants (`where`) at a run's temperature, with their derivatives to the free constants."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.network.model import Computed, Network
from kinetics_db.engine.network.syntax import parameters_of
from kinetics_db.engine.simulation.tape import Tape
from kinetics_db.errors import InvalidInput

Floats = NDArray[np.float64]


class ComputedConstants:
    """All constants of a network: the free ones, then the computed ones in an order that can be computed.

    Attributes
    ----------
    names : tuple of str
        `network.constants`, then the computed ones.
    """

    def __init__(self, network: Network) -> None:
        ordered = _in_order(network)
        self.free = len(network.constants)
        self.names = network.constants + tuple(c.name for c in ordered)
        self._tapes = [Tape([c.expression], species=(), names=self.names) for c in ordered]
        self.uses_temperature = any(tape.uses_temperature for tape in self._tapes)

    def evaluate(self, constants: Floats, temperature: float | None) -> tuple[Floats, Floats]:
        """Values, shape (m,), and their derivatives to the free constants, shape (m, free).

        Raises
        ------
        ArithmeticError, ValueError
            Where an expression is not defined.
        """
        m = len(self.names)
        values = np.zeros(m)
        values[: self.free] = constants
        gradient = np.zeros((m, self.free))
        gradient[: self.free] = np.eye(self.free)
        kelvin = math.nan if temperature is None else temperature
        for row, tape in enumerate(self._tapes, start=self.free):
            result = tape.run([*values.tolist(), kelvin], derivatives=True)
            values[row] = result[0]
            for (_, name), slope in zip(tape.name_entries, result[1:], strict=True):
                gradient[row] += slope * gradient[name]
        return values, gradient


def _in_order(network: Network) -> list[Computed]:
    known = set(network.constants)
    waiting = list(network.computed)
    ordered: list[Computed] = []
    while waiting:
        ready = [c for c in waiting if all(name in known for name in parameters_of(c.expression))]
        if not ready:
            raise InvalidInput(
                "computed constants depend on one another in a circle: " + ", ".join(c.name for c in waiting),
                cure="each computed from constants that are known before it",
            )
        ordered += ready
        known.update(c.name for c in ready)
        waiting = [c for c in waiting if c not in ready]
    return ordered
