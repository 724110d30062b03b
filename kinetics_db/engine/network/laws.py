"""Whether a written-out law stops when what it uses up has run out."""

from __future__ import annotations

import random
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.network.derived import computed_in_order, net_numbers
from kinetics_db.engine.network.expressions import Expression, evaluate
from kinetics_db.engine.network.model import Computed, Step
from kinetics_db.engine.network.syntax import parameters_of, species_of
from kinetics_db.errors import Problem

TRIALS = 8
TOGETHER = 50  # species set to zero in one evaluation; bounds the memory
RELATIVE = 1e-9  # of the rate with the species present; what is left below is rounding

Floats = NDArray[np.float64]


class LawTrials:
    """Random positive values of constants and temperatures, from a fixed seed, to try the laws at.

    Computed constants follow from the others, as they do in a run.
    """

    def __init__(self, laws: Sequence[Expression], computed: Sequence[Computed]) -> None:
        self._draw = random.Random(1)  # noqa: S311 - a fixed sample, nothing secret
        self._temperature = np.array([self._draw.uniform(250.0, 400.0) for _ in range(TRIALS)])
        self._constants: dict[str, Floats] = {}
        for expression in (*laws, *(one.expression for one in computed)):
            for name in parameters_of(expression):
                self._constants.setdefault(name, self._positive())
        for one in computed_in_order(computed):
            self._constants[one.name] = np.broadcast_to(
                evaluate(one.expression, parameters=self._constants, temperature=self._temperature), TRIALS
            )

    def _positive(self) -> Floats:
        return np.array([self._draw.uniform(0.5, 2.0) for _ in range(TRIALS)])

    def problems(self, step: Step, column: int, held: frozenset[str]) -> tuple[Problem, ...]:
        """Warnings where concentrations would go below zero, or where the law has no value, at [X] = 0.

        A law may be negative: then its products are what it uses up.
        """
        if step.law is None:
            return ()
        net = {name: number for name, number in net_numbers(step).items() if number and name not in held}
        used_up: list[str] = []
        undefined: list[str] = []
        with np.errstate(all="ignore"):  # what overflows is not finite and is not tried
            for name, present, gone in self._rates(step.law, tuple(net)):
                tried = np.isfinite(present)
                if np.any(tried & ~np.isfinite(gone)):
                    undefined.append(name)
                elif np.any(tried & (gone * net[name] < -RELATIVE * np.abs(present * net[name]))):
                    used_up.append(name)
        effects = (
            (used_up, ", so that concentrations can fall below zero"),
            (undefined, ": it has no value there"),
        )
        return tuple(
            Problem(
                f"this law does not vanish when {_named(names)} {'has' if len(names) == 1 else 'have'}"
                f" run out{effect}",
                line=step.line,
                column=column,
                cure=f"a factor such as {' and '.join(f'[{name}]' for name in names)} in the law",
                severity="warning",
            )
            for names, effect in effects
            if names
        )

    def _rates(self, law: Expression, wanted: tuple[str, ...]) -> Iterator[tuple[str, Floats, Floats]]:
        """Each wanted species with the rates, shape (trials,), with it present and with none of it."""
        amounts = {name: self._positive() for name in species_of(law)}
        for begin in range(0, len(wanted), TOGETHER):
            part = wanted[begin : begin + TOGETHER]
            rows = dict(amounts)
            for row, name in enumerate(part, start=1):
                if name in amounts:  # row 0 has everything present, row i none of the i-th species
                    rows[name] = np.tile(amounts[name], (len(part) + 1, 1))
                    rows[name][row] = 0.0
            rates = evaluate(
                law, parameters=self._constants, concentrations=rows, temperature=self._temperature
            )
            table = np.broadcast_to(rates, (len(part) + 1, TRIALS))
            for row, name in enumerate(part, start=1):
                yield name, table[0], table[row]


def _named(names: Sequence[str]) -> str:
    return " and ".join(f"'{name}'" for name in names)
