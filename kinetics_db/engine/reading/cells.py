"""What one cell says: a number, a time, or that there is none."""

from __future__ import annotations

import math
import re
from functools import lru_cache
from typing import NamedTuple

from kinetics_db.engine.units import MAX_LENGTH, convert, is_unit, kind_of_unit

MISSING = frozenset(
    [
        "",
        "-",
        "--",
        "---",
        "\u2013",
        "\u2014",
        "n/a",
        "na",
        "#n/a",
        "nan",
        "nd",
        "n.d.",
        "n.d",
        "null",
        "none",
    ]
)
_NUMBER = {
    ".": re.compile(r"[+-]?(?:\d{1,40}(?:\.\d{0,40})?|\.\d{1,40})(?:[eE][+-]?\d{1,4})?"),
    ",": re.compile(r"[+-]?(?:\d{1,40}(?:,\d{1,40})?|,\d{1,40})(?:[eE][+-]?\d{1,4})?"),
}
_CLOCK = re.compile(r"([+-]?)(?:(\d{1,4}):)?(\d{1,4}):(\d{1,2}(?:[.,]\d{1,9})?)")
_THOUSANDS = re.compile(r"[+-]?\d{1,3}(?:,\d{3})+(?:\.\d*)?|[+-]?\d{1,3}(?:[. ']\d{3})+(?:,\d*)?")
_STARTS_WITH_THOUSANDS = re.compile(rf"(?:{_THOUSANDS.pattern})(?!\d)")
_WORD = re.compile(r"[^\W\d_]+")
_THOUSANDS_WHY = "looks like a number with thousands separators; export it without them"
_INFINITE = re.compile(r"[+-]?(?:inf(?:inity)?|\u221e)", re.IGNORECASE)


class Cell(NamedTuple):
    """``kind`` is 'number', 'missing', 'limit' (beyond a limit), or 'wrong' for the reason ``why``."""

    kind: str
    value: float = math.nan
    why: str = ""


class Clock(NamedTuple):
    """How the time column's numbers and colons are read; ``unit`` '' when the header states none."""

    unit: str
    colons: str = ""  # what a time with one colon is, 'h:mm' or 'mm:ss'; '' when nothing states it

    @property
    def is_open(self) -> bool:
        """Whether a time with one colon can be h:mm or mm:ss; beside numbers in s or min it is mm:ss."""
        return not self.colons and (not self.unit or convert(1.0, self.unit, "s") >= 3600)


def number_cell(text: str, decimal: str) -> Cell:
    """Read a stripped cell of a signal column."""
    if _NUMBER[decimal].fullmatch(text):
        value = float(text.replace(",", "."))
        if math.isinf(value):
            return Cell("wrong", why="is too large for a number")
        return Cell("number", value)
    if text.lower() in MISSING:
        return Cell("missing")
    if text[0] in "<>\u2264\u2265" and _NUMBER[decimal].fullmatch(text.lstrip("<>=\u2264\u2265 ")):
        return Cell("limit")
    return Cell("wrong", why=_why(text, decimal))


def _why(text: str, decimal: str) -> str:
    if text[0] in "=@":
        return "is a formula; export values, not formulas"
    if text[0] == "#":
        return "is a spreadsheet error"
    if _INFINITE.fullmatch(text):
        return "is infinite"
    if _THOUSANDS.fullmatch(text):
        return _THOUSANDS_WHY
    if _NUMBER["," if decimal == "." else "."].fullmatch(text):
        return f"has another decimal sign than '{decimal}'"
    return "is not a number"


def time_cell(text: str, decimal: str, clock: Clock) -> Cell:
    """Read a stripped cell of the time column; the value is in s.

    A time with one colon is taken as mm:ss while the clock is open: whoever reads the column has to settle it.
    """
    plain = number_cell(text, decimal)
    if plain.kind == "number":
        if clock.unit:
            times, over = _seconds(clock.unit)
            return Cell("number", plain.value * times / over)
        if plain.value == 0:
            return plain  # zero is zero in every unit
        return Cell("wrong", why="has no unit, and the header states none for time")
    if plain.kind in ("missing", "limit"):
        return Cell("wrong", why="is no time; every row needs one")
    match = _CLOCK.fullmatch(text)
    if match:
        return _clock_cell(match, clock)
    if _is_time_with_more_numbers(text, decimal):
        if _STARTS_WITH_THOUSANDS.match(text):
            return Cell("wrong", why=_THOUSANDS_WHY)
        return Cell("wrong", why="holds more than one number; write h:mm:ss, or one number with one unit")
    number = re.match(_NUMBER[decimal].pattern, text)
    unit = text[number.end() :].strip() if number else ""
    if number and is_unit(unit) and kind_of_unit(unit) == "time":
        times, over = _seconds(unit)
        return Cell("number", float(number.group().replace(",", ".")) * times / over)
    return plain


def _is_time_with_more_numbers(text: str, decimal: str) -> bool:
    """``1 h 30``, ``1h05`` or ``1 200 s``: as a factor of the unit the second number would scale the first."""
    number = re.match(_NUMBER[decimal].pattern, text)
    rest = text[number.end() :] if number else ""
    if len(rest) > MAX_LENGTH or not any(sign.isdigit() for sign in rest):
        return False
    words = _WORD.findall(rest)
    return bool(words) and all(is_unit(word) and kind_of_unit(word) == "time" for word in words)


@lru_cache(maxsize=64)
def _seconds(unit: str) -> tuple[float, float]:
    """Factor and divisor to s, found once per unit; dividing by 1000 rounds once, as `convert` does."""
    factor = convert(1.0, unit, "s")
    return (factor, 1.0) if factor >= 1 else (1.0, float(round(1 / factor)))


def _clock_cell(match: re.Match[str], clock: Clock) -> Cell:
    sign, hours, middle, last = match.groups()
    low = float(last.replace(",", "."))
    if hours is None and clock.colons == "h:mm":
        seconds = int(middle) * 3600.0 + low * 60.0
    elif hours is None:
        seconds = int(middle) * 60.0 + low
    else:
        if int(middle) >= 60:
            return Cell("wrong", why="has 60 or more minutes after the hours")
        seconds = int(hours) * 3600.0 + int(middle) * 60.0 + low
    if low >= 60:
        return Cell("wrong", why="has 60 or more after the last colon")
    return Cell("number", -seconds if sign == "-" else seconds)


def looks_like_value(text: str, decimal: str) -> bool:
    """Whether a cell could stand in a row of data (in any column)."""
    if number_cell(text, decimal).kind in ("number", "missing", "limit") or _INFINITE.fullmatch(text):
        return True
    # a time that is refused for its second number still shows where the columns are
    return time_cell(text, decimal, Clock("s")).kind == "number" or _is_time_with_more_numbers(text, decimal)


def is_number(text: str, decimal: str) -> bool:
    return _NUMBER[decimal].fullmatch(text) is not None
