"""Exact derivatives of expressions, lightly simplified: zeros and ones vanish, numbers are folded."""

from __future__ import annotations

import math

from kinetics_db.engine.network.syntax import (
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
)

ZERO = Number(0.0)
ONE = Number(1.0)
MINUS_ONE = Number(-1.0)


def derivative(expression: Expression, variable: Variable) -> Expression:
    """Partial derivative of an expression, exact.

    Parameters
    ----------
    expression : Expression
    variable : Parameter, Concentration or Temperature
        Held apart from all others: a computed constant counts as a parameter of its own.

    Returns
    -------
    Expression
        ``Number(0.0)`` where the variable does not occur.
    """
    match expression:
        case Number():
            return ZERO
        case Parameter() | Concentration() | Temperature():
            return ONE if expression == variable else ZERO
        case Negation(operand):
            return _negative(derivative(operand, variable))
        case Call(_, argument):
            return _product(_derivative_of_function(expression), derivative(argument, variable))
        case Binary(operator, left, right):
            slope_left, slope_right = derivative(left, variable), derivative(right, variable)
            if operator == "+":
                return _sum(slope_left, slope_right)
            if operator == "-":
                return _difference(slope_left, slope_right)
            if operator == "*":
                return _sum(_product(slope_left, right), _product(left, slope_right))
            if operator == "/":
                return _difference(
                    _quotient(slope_left, right),
                    _quotient(_product(left, slope_right), _power(right, Number(2.0))),
                )
            return _sum(
                _product(_product(right, _power(left, _difference(right, ONE))), slope_left),
                _product(_product(expression, Call("log or zero", left)), slope_right),
            )


def _derivative_of_function(call: Call) -> Expression:
    """d function(argument) / d argument."""
    if call.function == "exp":
        return call
    if call.function == "sqrt":
        return _quotient(Number(0.5), call)
    return _quotient(ONE, call.argument)


def _number(node: Expression) -> float | None:
    """Value of a number with or without a minus sign, else None."""
    match node:
        case Number(value):
            return value
        case Negation(Number(value)):
            return -value
        case _:
            return None


def _joined(operator: Operator, left: Expression, right: Expression) -> Expression:
    """Two operands joined, folded to one number where both are numbers and the result is finite."""
    a, b = _number(left), _number(right)
    if a is not None and b is not None and not (operator == "/" and b == 0):
        value = {"+": a + b, "-": a - b, "*": a * b}[operator] if operator != "/" else a / b
        if math.isfinite(value):
            return Number(value + 0.0)
    return Binary(operator, left, right)


def _sum(left: Expression, right: Expression) -> Expression:
    if left == ZERO:
        return right
    if right == ZERO:
        return left
    if isinstance(right, Negation):
        return _difference(left, right.operand)
    return _joined("+", left, right)


def _difference(left: Expression, right: Expression) -> Expression:
    if right == ZERO:
        return left
    if left == ZERO:
        return _negative(right)
    if isinstance(right, Negation):
        return _sum(left, right.operand)
    return _joined("-", left, right)


def _negative(operand: Expression) -> Expression:
    if isinstance(operand, Number):
        return Number(0.0 - operand.value)
    if isinstance(operand, Negation):
        return operand.operand
    return Negation(operand)


def _product(left: Expression, right: Expression) -> Expression:
    if ZERO in (left, right):
        return ZERO
    if left == ONE:
        return right
    if right == ONE:
        return left
    if right == MINUS_ONE:
        return _negative(left)
    if left == MINUS_ONE:
        return _negative(right)
    if isinstance(left, Negation):
        return _negative(_product(left.operand, right))
    if isinstance(right, Negation):
        return _negative(_product(left, right.operand))
    return _joined("*", left, right)


def _quotient(left: Expression, right: Expression) -> Expression:
    if left == ZERO:
        return ZERO
    if right == ONE:
        return left
    if isinstance(left, Negation):
        return _negative(_quotient(left.operand, right))
    return _joined("/", left, right)


def _power(base: Expression, exponent: Expression) -> Expression:
    if exponent == ZERO:
        return ONE
    if exponent == ONE:
        return base
    return Binary("^", base, exponent)
