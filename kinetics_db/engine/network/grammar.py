"""From text to the syntax tree of an expression, by recursive descent.

From loosest to tightest: ``+ -``, ``* /``, unary minus, ``^``. ``^`` is right-associative and binds tighter
than the minus before it, as in mathematics: ``-a^2`` is ``-(a^2)``, ``2^-1`` is a half.
"""

from __future__ import annotations

import math
from difflib import get_close_matches
from typing import NamedTuple, cast

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
)
from kinetics_db.engine.network.tokens import MAX_NAME_LENGTH, RESERVED, Token, refuse, tokenise
from kinetics_db.errors import InvalidInput

MAX_DEPTH = 100  # derivatives of a tree this deep still fit the interpreter's stack
MAX_NESTING = 40  # parentheses, signs and powers open at once; each costs the parser up to seven frames
KNOWN_AS = {"ln": "log", "Exp": "exp", "EXP": "exp", "Log": "log", "LOG": "log", "LN": "log", "Sqrt": "sqrt"}


class Place(NamedTuple):
    """Where a parameter or a species stands in the text."""

    name: str
    column: int


class Parsed(NamedTuple):
    """An expression with the places of its names, for messages."""

    expression: Expression
    parameters: tuple[Place, ...]
    species: tuple[Place, ...]


def parse_expression(text: str, line: int = 1, column: int = 1) -> Expression:
    """Syntax tree of an expression.

    Parameters
    ----------
    text : str
        ``+ - * / ^``, parentheses, numbers, parameters, ``[species]``, ``T``, and exp, log, sqrt.
    line, column : int
        Where ``text`` begins, for messages.

    Raises
    ------
    InvalidInput
        With the place of the first thing that cannot be read and what would be accepted.
    """
    return parse_with_places(text, line, column).expression


def parse_with_places(text: str, line: int, column: int, *, longest_chain: int = MAX_DEPTH) -> Parsed:
    """Like `parse_expression`, with the column of every name; ``longest_chain`` bounds the outermost sum."""
    return _Parser(text, line, column, longest_chain).parse()


class _Parser:
    """Keeps one token of look-ahead. Each method returns a node and the depth of its tree."""

    def __init__(self, text: str, line: int, column: int, longest_chain: int) -> None:
        self._tokens = tokenise(text, line, column)
        self._line = line
        self._next = next(self._tokens)
        self._nesting = 0
        self._longest_chain = longest_chain
        self._parameters: list[Place] = []
        self._species: list[Place] = []

    def parse(self) -> Parsed:
        if self._at_end():
            raise self._error("an expression is missing", "such as k*[A]")
        tree, _ = self._sum()
        if not self._at_end():
            raise self._surplus()
        return Parsed(tree, tuple(self._parameters), tuple(self._species))

    def _sum(self) -> tuple[Expression, int]:
        left, depth = self._product()
        while self._next.text in ("+", "-") and self._next.kind == "sign":
            sign = self._take()
            right, other = self._product()
            limit = MAX_DEPTH if self._nesting else self._longest_chain
            left = Binary(cast(Operator, sign.text), left, right)
            depth = self._deeper(depth, other, at=sign, limit=limit)
        return left, depth

    def _product(self) -> tuple[Expression, int]:
        left, depth = self._signed()
        while self._next.text in ("*", "/") and self._next.kind == "sign":
            sign = self._take()
            right, other = self._signed()
            left, depth = Binary(cast(Operator, sign.text), left, right), self._deeper(depth, other, at=sign)
        return left, depth

    def _signed(self) -> tuple[Expression, int]:
        if self._next.kind == "sign" and self._next.text == "-":
            sign = self._take()
            self._enter(sign)
            operand, depth = self._signed()
            self._nesting -= 1
            return Negation(operand), self._deeper(depth, at=sign)
        return self._power()

    def _power(self) -> tuple[Expression, int]:
        base, depth = self._atom()
        if self._next.kind == "sign" and self._next.text == "^":
            sign = self._take()
            self._enter(sign)
            exponent, other = self._signed()
            self._nesting -= 1
            return Binary("^", base, exponent), self._deeper(depth, other, at=sign)
        return base, depth

    def _atom(self) -> tuple[Expression, int]:
        token = self._take()
        if token.kind == "number":
            value = float(token.text)
            if not math.isfinite(value):
                raise refuse(
                    f"{token.text} is too large a number", self._line, token.column, "at most 1.7e308"
                )
            return Number(value), 1
        if token.kind == "species":
            self._species.append(Place(token.text, token.column))
            return Concentration(token.text), 1
        if token.kind == "name":
            return self._named(token)
        if token.text == "(":
            return self._parenthesis(token)
        raise self._misplaced(token)

    def _named(self, token: Token) -> tuple[Expression, int]:
        is_called = self._next.kind == "sign" and self._next.text == "("
        if token.text in FUNCTION_NAMES:
            if not is_called:
                raise refuse(
                    f"the function {token.text} has no argument",
                    self._line,
                    token.column,
                    f"{token.text}(...)",
                )
            argument, depth = self._parenthesis(self._take())
            return Call(token.text, argument), self._deeper(depth, at=token)
        if is_called:
            raise self._unknown_function(token)
        if token.text == "T":
            return Temperature(), 1
        if token.text in RESERVED:
            raise refuse(
                f"'{token.text}' is reserved: it stands for {RESERVED[token.text]}",
                self._line,
                token.column,
                "the name of a parameter, or a species in brackets",
            )
        if len(token.text) > MAX_NAME_LENGTH:
            raise refuse(
                f"a name of {len(token.text)} characters",
                self._line,
                token.column,
                f"a name of at most {MAX_NAME_LENGTH} characters",
            )
        self._parameters.append(Place(token.text, token.column))
        return Parameter(token.text), 1

    def _parenthesis(self, opening: Token) -> tuple[Expression, int]:
        self._enter(opening)
        inside, depth = self._sum()
        self._nesting -= 1
        if self._next.text != ")" or self._next.kind != "sign":
            if self._at_end():
                raise refuse("this parenthesis is not closed", self._line, opening.column, "a ) to match it")
            raise self._surplus()
        self._take()
        return inside, depth

    def _at_end(self) -> bool:
        return self._next.kind == "end"

    def _take(self) -> Token:
        token = self._next
        if not self._at_end():
            self._next = next(self._tokens)
        return token

    def _enter(self, token: Token) -> None:
        self._nesting += 1
        if self._nesting > MAX_NESTING:
            raise self._too_deep(token, MAX_NESTING)

    def _deeper(self, *depths: int, at: Token, limit: int = MAX_DEPTH) -> int:
        depth = max(depths) + 1
        if depth > limit:
            raise self._too_deep(at, limit)
        return depth

    def _too_deep(self, token: Token, limit: int) -> InvalidInput:
        return refuse(
            f"more than {limit} operations stand inside or after one another",
            self._line,
            token.column,
            "fewer operations, or the terms of a long sum grouped in parentheses",
        )

    def _unknown_function(self, token: Token) -> InvalidInput:
        meant = KNOWN_AS.get(token.text) or next(iter(get_close_matches(token.text, FUNCTION_NAMES, 1)), None)
        if token.text == "log10":
            cure = "log(x)/log(10), since log is the natural logarithm"
        elif meant:
            cure = f"{meant}(...)" + (", the natural logarithm" if meant == "log" else "")
        else:
            cure = f"exp, log or sqrt as a function, or * for a product: {token.text}*(...)"
        return refuse(f"'{token.text}' is not a function of the notation", self._line, token.column, cure)

    def _surplus(self) -> InvalidInput:
        """What follows a complete operand must be an operator."""
        token = self._next
        if token.text == ")" and token.kind == "sign":
            return self._error("this parenthesis was not opened", "a ( to match it")
        shown = f"[{token.text}]" if token.kind == "species" else token.text
        return self._error(
            f"there is no operator before '{shown}'", f"* for a product, as in k*{shown or '[A]'}"
        )

    def _misplaced(self, token: Token) -> InvalidInput:
        wanted = "a number, a parameter, [species], T or ("
        if token.kind == "end":
            return refuse("the expression ends too early", self._line, token.column, wanted)
        if token.text == "+":
            return refuse(
                "'+' has nothing before it", self._line, token.column, "the expression without this +"
            )
        return refuse(f"'{token.text}' stands where a value is expected", self._line, token.column, wanted)

    def _error(self, message: str, cure: str) -> InvalidInput:
        return refuse(message, self._line, self._next.column, cure)
