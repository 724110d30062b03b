"""Computed constants (`where`) at a run's temperature, with their derivatives to the free constants."""

from __future__ import annotations

import math
from graphlib import CycleError

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.network.derived import computed_in_order
from kinetics_db.engine.network.model import Network
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
        try:
            ordered = computed_in_order(network.computed)
        except CycleError as error:
            raise InvalidInput(
                f"computed constants depend on one another in a circle: {', '.join(error.args[1])}",
                cure="each computed from constants that are known before it",
            ) from error
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
