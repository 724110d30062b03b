"""The syntax tree of a rate law or of a computed constant: frozen values that can be compared and hashed.

A node made by the parser has numbers of zero or more; a minus sign is a `Negation` of its own. Derivatives
may hold negative numbers.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal, TypeAlias

Operator = Literal["+", "-", "*", "/", "^"]
FunctionName = Literal["exp", "log", "sqrt", "log or zero"]
"""`log or zero` is log(x) with the value 0 at x = 0. It comes out of differentiating x^n by n, where
x^n log(x) tends to 0 with x; it cannot be typed."""

FUNCTION_NAMES: tuple[FunctionName, ...] = ("exp", "log", "sqrt")
"""The functions that the notation knows; log is the natural logarithm."""


@dataclass(frozen=True, slots=True)
class Number:
    """A number as written."""

    value: float


@dataclass(frozen=True, slots=True)
class Parameter:
    """A constant by name, given, fitted or computed."""

    name: str


@dataclass(frozen=True, slots=True)
class Concentration:
    """The concentration of a species, ``[species]`` in the text."""

    species: str


@dataclass(frozen=True, slots=True)
class Temperature:
    """The thermodynamic temperature, ``T`` in the text, K."""


@dataclass(frozen=True, slots=True)
class Negation:
    """Minus the operand."""

    operand: Expression


@dataclass(frozen=True, slots=True)
class Binary:
    """Two operands joined by ``+ - * /`` or ``^`` (power)."""

    operator: Operator
    left: Expression
    right: Expression


@dataclass(frozen=True, slots=True)
class Call:
    """A function of one argument."""

    function: FunctionName
    argument: Expression


Expression: TypeAlias = Number | Parameter | Concentration | Temperature | Negation | Binary | Call
Variable: TypeAlias = Parameter | Concentration | Temperature
"""What an expression can be differentiated by."""


def walk(expression: Expression) -> Iterator[Expression]:
    """Every node, parents before children, left before right; keeps its own stack, so depth is no limit."""
    waiting = [expression]
    while waiting:
        node = waiting.pop()
        yield node
        match node:
            case Binary(_, left, right):
                waiting += (right, left)
            case Negation(operand):
                waiting.append(operand)
            case Call(_, argument):
                waiting.append(argument)
            case _:
                pass


def parameters_of(expression: Expression) -> tuple[str, ...]:
    """Names of the parameters, each once, in order of first appearance."""
    return tuple(dict.fromkeys(n.name for n in walk(expression) if isinstance(n, Parameter)))


def species_of(expression: Expression) -> tuple[str, ...]:
    """Names of the species whose concentration stands in it, each once, in order of first appearance."""
    return tuple(dict.fromkeys(n.species for n in walk(expression) if isinstance(n, Concentration)))


def uses_temperature(expression: Expression) -> bool:
    """Whether `T` stands in it."""
    return any(isinstance(n, Temperature) for n in walk(expression))
