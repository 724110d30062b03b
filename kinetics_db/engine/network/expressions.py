"""Rate laws and computed constants as expressions: parse, evaluate, differentiate, write.

The tree is in `syntax`, the grammar in `grammar`, derivatives in `calculus`; this module gathers them and
adds evaluation and writing.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, TypeAlias, cast

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.network.calculus import derivative
from kinetics_db.engine.network.grammar import MAX_DEPTH, parse_expression
from kinetics_db.engine.network.syntax import (
    FUNCTION_NAMES,
    Binary,
    Call,
    Concentration,
    Expression,
    Negation,
    Number,
    Operator,
    Parameter,
    Temperature,
    Variable,
    parameters_of,
    species_of,
    uses_temperature,
    walk,
)
from kinetics_db.engine.network.tokens import quoted
from kinetics_db.errors import InvalidInput

__all__ = [
    "FUNCTION_NAMES",
    "MAX_DEPTH",
    "Binary",
    "Call",
    "Concentration",
    "Expression",
    "Negation",
    "Number",
    "Operator",
    "Parameter",
    "Temperature",
    "Value",
    "Variable",
    "derivative",
    "evaluate",
    "number_text",
    "parameters_of",
    "parse_expression",
    "species_of",
    "to_plain",
    "uses_temperature",
    "walk",
    "write_expression",
]

Value: TypeAlias = float | complex | NDArray[Any]
"""A number or an array; arrays of one expression have to broadcast together."""


def evaluate(
    expression: Expression,
    *,
    parameters: Mapping[str, Value] | None = None,
    concentrations: Mapping[str, Value] | None = None,
    temperature: Value | None = None,
) -> Any:
    """Value of an expression, in double precision or in complex numbers.

    Parameters
    ----------
    expression : Expression
    parameters : mapping name -> value, in the units that the mechanism means
    concentrations : mapping species -> value, mol/L or the unit of the start values
    temperature : value, K

    Returns
    -------
    numpy.float64, numpy.complex128 or ndarray
        inf or NaN where the expression has no finite value, never an arithmetic exception: a rate that cannot
        be computed is an outcome of an integration.

    Raises
    ------
    InvalidInput
        When a parameter, a species or the temperature that stands in the expression is not given.
    """
    with np.errstate(all="ignore"):
        return _value(expression, parameters or {}, concentrations or {}, temperature)


def _value(
    node: Expression,
    parameters: Mapping[str, Value],
    concentrations: Mapping[str, Value],
    temperature: Value | None,
) -> Any:
    match node:
        case Number(value):
            return np.float64(value)
        case Parameter(name):
            if name not in parameters:
                raise InvalidInput(
                    f"no value is given for the constant '{name}'", field=name, cure="a number"
                )
            return _inexact(parameters[name])
        case Concentration(species):
            if species not in concentrations:
                raise InvalidInput(
                    f"no concentration is given for [{species}]", field=species, cure="a number"
                )
            return _inexact(concentrations[species])
        case Temperature():
            if temperature is None:
                raise InvalidInput("no temperature is given", field="T", cure="the temperature in K")
            return _inexact(temperature)
        case Negation(operand):
            return -_value(operand, parameters, concentrations, temperature)
        case Call(function, argument):
            x = _value(argument, parameters, concentrations, temperature)
            if function == "exp":
                return np.exp(x)
            if function == "log":
                return np.log(x)
            if function == "sqrt":
                return np.sqrt(x)
            return np.where(x == 0, 0.0, np.log(x))[()]
        case Binary(operator, left, right):
            a = _value(left, parameters, concentrations, temperature)
            b = _value(right, parameters, concentrations, temperature)
            if operator == "+":
                return a + b
            if operator == "-":
                return a - b
            if operator == "*":
                return a * b
            if operator == "/":
                return a / b
            return np.power(a, b)


def _inexact(value: Value) -> Any:
    """Value as NumPy's own number, whose arithmetic gives inf and NaN where Python's raises."""
    if isinstance(value, float | int):
        return np.float64(value)
    array = np.asarray(value)
    return (array if array.dtype.kind in "fc" else array.astype(np.float64))[()]


# How tightly each form binds; an operand is put in parentheses when it binds less than its place asks.
_SUM, _PRODUCT, _SIGNED, _POWER, _ATOM = range(1, 6)
_PLACES: dict[Operator, tuple[int, int, int]] = {  # own strength, what the left and the right operand need
    "+": (_SUM, _SUM, _PRODUCT),
    "-": (_SUM, _SUM, _PRODUCT),
    "*": (_PRODUCT, _PRODUCT, _SIGNED),
    "/": (_PRODUCT, _PRODUCT, _SIGNED),
    "^": (_POWER, _ATOM, _SIGNED),
}


def write_expression(expression: Expression) -> str:
    """Text that parses to the same tree, with no more parentheses than that needs.

    Raises
    ------
    InvalidInput
        For the internal function 'log or zero', which a derivative by an exponent holds.
    """
    return _written(expression)[0]


def _written(node: Expression) -> tuple[str, int]:
    match node:
        case Number(value):
            return number_text(value), _ATOM if value >= 0 else _SIGNED
        case Parameter(name):
            return name, _ATOM
        case Concentration(species):
            return f"[{quoted(species)}]", _ATOM
        case Temperature():
            return "T", _ATOM
        case Negation(operand):
            return "-" + _operand(operand, _SIGNED), _SIGNED
        case Call(function, argument):
            if function not in FUNCTION_NAMES:
                raise InvalidInput(f"the function '{function}' cannot be written in the notation")
            return f"{function}({_written(argument)[0]})", _ATOM
        case Binary(operator, left, right):
            own, for_left, for_right = _PLACES[operator]
            joint = operator if own > _SUM else f" {operator} "
            return _operand(left, for_left) + joint + _operand(right, for_right), own


def _operand(node: Expression, needed: int) -> str:
    text, strength = _written(node)
    return text if strength >= needed else f"({text})"


def number_text(value: float) -> str:
    """Shortest text that reads back as the same double; whole numbers without a decimal point."""
    if value == int(value) and abs(value) < 1e15:
        return str(int(value))
    return repr(float(value))


def to_plain(expression: Expression) -> Any:
    """The tree as plain lists for canonical JSON: ``["*", ["parameter", "k"], ["concentration", "A"]]``."""
    match expression:
        case Number(value):
            return value
        case Parameter(name):
            return ["parameter", name]
        case Concentration(species):
            return ["concentration", species]
        case Temperature():
            return ["temperature"]
        case Negation(operand):
            return ["negative", to_plain(operand)]
        case Call(function, argument):
            return [cast(str, function), to_plain(argument)]
        case Binary(operator, left, right):
            return [cast(str, operator), to_plain(left), to_plain(right)]
