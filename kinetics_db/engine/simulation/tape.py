"""Expressions as a list of operations over numbers, with common subexpressions computed once.

A tape holds the values of some expressions and all their exact derivatives, so that a written-out law costs
a fraction of a microsecond for each distinct operation in it.
"""

from __future__ import annotations

import math
import operator
from collections.abc import Callable, Sequence

from kinetics_db.engine.network.expressions import derivative
from kinetics_db.engine.network.syntax import (
    Binary,
    Call,
    Concentration,
    Expression,
    Negation,
    Number,
    Parameter,
    Temperature,
    parameters_of,
    species_of,
    uses_temperature,
)

SMALLEST_BASE = 1e-30
"""Below this a concentration is treated as this in a power that would be infinite at zero."""

SMALLEST_ROOT = 1e-15
"""Stands for a zero denominator in a derivative, such as that of sqrt([A]) at [A] = 0, which is infinite."""

Operation = tuple[Callable[[float, float], float], int, int]


def power(base: float, exponent: float) -> float:
    """base^exponent, continued to bases below zero as an odd function unless the exponent is an integer.

    A concentration that rounding leaves a hair below zero so keeps a finite rate that leads back to zero.
    A negative power of zero is that of `SMALLEST_BASE`.
    """
    if exponent < 0 and abs(base) < SMALLEST_BASE:
        base = SMALLEST_BASE
    if base < 0 and exponent != math.floor(exponent):
        return -math.pow(-base, exponent)
    return math.pow(base, exponent)


def _minus(a: float, _: float) -> float:
    return -a


def _exp(a: float, _: float) -> float:
    return math.exp(a)


def _log(a: float, _: float) -> float:
    return math.log(a)


def _log_or_zero(a: float, _: float) -> float:
    return math.log(abs(a)) if a != 0.0 else 0.0


def _sqrt(a: float, _: float) -> float:
    return power(a, 0.5)


def _divide_in_derivative(a: float, b: float) -> float:
    return a / (b if b != 0.0 else SMALLEST_ROOT)


_BINARY: dict[str, Callable[[float, float], float]] = {
    "+": operator.add,
    "-": operator.sub,
    "*": operator.mul,
    "/": operator.truediv,
    "^": power,
}
_FUNCTIONS: dict[str, Callable[[float, float], float]] = {
    "exp": _exp,
    "log": _log,
    "sqrt": _sqrt,
    "log or zero": _log_or_zero,
}


class Tape:
    """Values and derivatives of expressions at one point.

    Attributes
    ----------
    outputs : int, number of expressions
    species_entries, name_entries : tuple of (expression, position)
        Which derivatives follow the values, by position in `species` and in `names`.
    uses_temperature : bool
    """

    def __init__(
        self, expressions: Sequence[Expression], *, species: Sequence[str], names: Sequence[str]
    ) -> None:
        self.outputs = len(expressions)
        self.uses_temperature = any(uses_temperature(e) for e in expressions)
        at_species = {name: i for i, name in enumerate(species)}
        at_names = {name: i for i, name in enumerate(names)}
        by_species = [(n, at_species[s]) for n, e in enumerate(expressions) for s in species_of(e)]
        by_names = [(n, at_names[s]) for n, e in enumerate(expressions) for s in parameters_of(e)]
        self.species_entries = tuple(by_species)
        self.name_entries = tuple(by_names)
        writer = _Writer(at_species, at_names)
        self._values = [writer.place(e) for e in expressions]
        self._short = len(writer.operations)  # values need no more than these
        writer.in_derivatives = True
        derivatives = [derivative(expressions[n], Concentration(species[i])) for n, i in by_species]
        derivatives += [derivative(expressions[n], Parameter(names[i])) for n, i in by_names]
        self._all = self._values + [writer.place(e) for e in derivatives]
        self._operations = writer.operations
        self._numbers = writer.numbers
        self._inputs = len(species) + len(names) + 1
        # numbers stand between the inputs and the results, which are known only now
        shift = len(writer.numbers)
        self._resolve(shift)

    def _resolve(self, shift: int) -> None:
        """Turn the writer's addresses into positions: inputs, then numbers, then results."""
        n = self._inputs

        def position(address: tuple[str, int]) -> int:
            kind, index = address
            return {"input": 0, "number": n, "result": n + shift}[kind] + index

        self._plan: list[Operation] = [(f, position(a), position(b)) for f, a, b in self._operations]
        self._short_plan = self._plan[: self._short]
        self._value_positions = [position(a) for a in self._values]
        self._all_positions = [position(a) for a in self._all]

    def run(self, inputs: list[float], *, derivatives: bool) -> list[float]:
        """Values, and then the derivatives in the order of `species_entries` and `name_entries`.

        Parameters
        ----------
        inputs : list of float, species, then names, then T

        Raises
        ------
        ZeroDivisionError, OverflowError, ValueError
            Where an expression is not defined.
        """
        v = inputs + self._numbers
        append = v.append
        if derivatives:
            for f, a, b in self._plan:
                append(f(v[a], v[b]))
            return [v[i] for i in self._all_positions]
        for f, a, b in self._short_plan:
            append(f(v[a], v[b]))
        return [v[i] for i in self._value_positions]


Address = tuple[str, int]


class _Writer:
    """Writes expressions onto one list of operations, each distinct operation once."""

    def __init__(self, species: dict[str, int], names: dict[str, int]) -> None:
        self._species = species
        self._names = names
        self.numbers: list[float] = []
        self.operations: list[tuple[Callable[[float, float], float], Address, Address]] = []
        self.in_derivatives = False
        self._known: dict[tuple[str, Address, Address], Address] = {}

    def place(self, expression: Expression) -> Address:
        """Address of an expression's value; writes the operations it needs."""
        match expression:
            case Number(value):
                return self._number(value)
            case Parameter(name):
                return ("input", len(self._species) + self._names[name])
            case Concentration(species):
                return ("input", self._species[species])
            case Temperature():
                return ("input", len(self._species) + len(self._names))
            case Negation(operand):
                address = self.place(operand)
                return self._operation("minus", _minus, address, address)
            case Binary(sign, left, right):
                return self._operation(sign, _BINARY[sign], self.place(left), self.place(right))
            case Call(function, argument):
                address = self.place(argument)
                return self._operation(function, _FUNCTIONS[function], address, address)
        raise TypeError(f"{expression!r} is not an expression")

    def _number(self, value: float) -> Address:
        if value not in self.numbers:
            self.numbers.append(value)
        return ("number", self.numbers.index(value))

    def _operation(self, key: str, f: Callable[[float, float], float], a: Address, b: Address) -> Address:
        known = self._known.get((key, a, b))
        if known is None:
            if self.in_derivatives and key == "/":
                f = _divide_in_derivative
            known = ("result", len(self.operations))
            self.operations.append((f, a, b))
            self._known[key, a, b] = known
        return known
