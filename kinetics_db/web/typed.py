"""Numbers as people type them into forms, and as forms show them again."""

from __future__ import annotations

import math
import re

from kinetics_db.errors import InvalidInput, Problem

LONGEST = 60
LONGEST_SHOWN = 24
EXAMPLE = "a number, for example 12.3 or 4.5e-3"

_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,4})?", re.ASCII)
_COMMA = re.compile(r"[+-]?\d+,\d+", re.ASCII)


def number_typed(text: str, *, field: str, cure: str = EXAMPLE) -> float:
    """The number that a text writes, with a point as decimal sign.

    Raises
    ------
    InvalidInput
        for an empty text, a decimal comma, anything that is no number, and one that no float can hold.
    """
    given = text.strip().replace("−", "-")  # a true minus sign, as pages show it
    if not given:
        raise InvalidInput("a number is missing", field=field, cure=cure)
    if _COMMA.fullmatch(given) and len(given) <= LONGEST:
        raise InvalidInput(
            f"'{_short(given)}' is no number", field=field, cure=f"write {_short(given.replace(',', '.'))}"
        )
    if len(given) > LONGEST or not _NUMBER.fullmatch(given):
        raise InvalidInput(f"'{_short(given)}' is no number", field=field, cure=cure)
    value = float(given)
    if not math.isfinite(value):
        raise InvalidInput(f"'{_short(given)}' is too large for a number", field=field, cure="at most 1e300")
    if value == 0 and re.search(r"[1-9]", re.split("[eE]", given)[0]):
        raise InvalidInput(
            f"'{_short(given)}' is too small for a number", field=field, cure="0, or 1e-300 and more"
        )
    return value


def number_or_none(text: str, *, field: str, cure: str = EXAMPLE) -> float | None:
    """As `number_typed`; None where nothing was typed."""
    return number_typed(text, field=field, cure=cure) if text.strip() else None


class Numbers:
    """Reads several numbers of a form and tells all that is wrong at once.

    >>> numbers = Numbers()
    >>> numbers.read("12.3", field="molar_mass"), numbers.read("", field="density")
    (12.3, None)
    >>> numbers.done()
    """

    def __init__(self) -> None:
        self.problems: list[Problem] = []

    def read(self, text: str, *, field: str, cure: str = EXAMPLE, required: bool = False) -> float | None:
        """The number, None where nothing was typed or it cannot be read."""
        try:
            return (number_typed if required else number_or_none)(text, field=field, cure=cure)
        except InvalidInput as error:
            self.problems += error.problems
            return None

    def wrong(self, message: str, *, field: str, cure: str) -> None:
        """Note another problem."""
        self.problems.append(Problem(message, field=field, cure=cure))

    def done(self) -> None:
        """InvalidInput with all that was wrong."""
        if self.problems:
            raise InvalidInput(self.problems)


def number_text(value: float | None) -> str:
    """The shortest text that `number_typed` reads as the same number; empty for None."""
    if value is None:
        return ""
    text = repr(float(value))
    return text[:-2] if text.endswith(".0") else text


def _short(text: str) -> str:
    return text if len(text) <= LONGEST_SHOWN else text[: LONGEST_SHOWN - 1] + "…"
