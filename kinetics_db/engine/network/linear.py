"""Observables: from an expression to the weights of a linear combination of species."""

from __future__ import annotations

import math

from kinetics_db.engine.network.model import Side
from kinetics_db.engine.network.syntax import Binary, Concentration, Expression, Negation, Number
from kinetics_db.engine.network.tokens import refuse

FORM = "a sum of species with numbers as weights, as in [Cat] + 2*[Cat2]"


def linear_terms(expression: Expression, line: int, column: int) -> Side:
    """Species with their weights, each once, in order of first appearance; weights of zero are dropped.

    Raises
    ------
    InvalidInput
        When the expression is not linear in concentrations, has a constant part, or no species is left.
    """
    weights: dict[str, float] = {}
    waiting: list[tuple[Expression, float]] = [(expression, 1.0)]  # sums are long; recursion is for factors
    while waiting:
        node, factor = waiting.pop()
        match node:
            case Binary("+", left, right):
                waiting += [(right, factor), (left, factor)]
            case Binary("-", left, right):
                waiting += [(right, -factor), (left, factor)]
            case Negation(operand):
                waiting.append((operand, -factor))
            case Binary("*", left, right):
                if (number := _number(right)) is not None:
                    waiting.append((left, factor * number))
                elif (number := _number(left)) is not None:
                    waiting.append((right, factor * number))
                else:
                    raise refuse("the observable is not a linear combination", line, column, FORM)
            case Binary("/", left, right) if _number(right):
                waiting.append((left, factor / (_number(right) or 1.0)))
            case Concentration(species):
                weights[species] = weights.get(species, 0.0) + factor
            case _ if _number(node) is not None:
                raise refuse("a number by itself in an observable", line, column, FORM)
            case _:
                raise refuse("the observable is not a linear combination", line, column, FORM)
    terms = tuple((species, weight) for species, weight in weights.items() if weight != 0)
    if not terms:
        raise refuse("no species is left in the observable", line, column, FORM)
    if not all(math.isfinite(weight) for _, weight in terms):
        raise refuse("a weight in the observable is too large", line, column, "weights below 1e308")
    return terms


def _number(expression: Expression) -> float | None:
    """Value of an expression of numbers alone by + - * /, else None."""
    match expression:
        case Number(value):
            return value
        case Negation(operand):
            inner = _number(operand)
            return None if inner is None else -inner
        case Binary(operator, left, right) if operator != "^":
            if (b := _number(right)) is None or (a := _number(left)) is None or (operator == "/" and b == 0):
                return None
            return {"+": a + b, "-": a - b, "*": a * b}[operator] if operator != "/" else a / b
        case _:
            return None
