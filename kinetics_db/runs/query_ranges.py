"""Ranges as people type them: ``50..150 mM``, ``50 uM..1 mM``, ``>= 30 degC``, ``..0.2 mol/L``, ``40 degC``."""

from __future__ import annotations

import math
import re
from decimal import Decimal

from kinetics_db.engine.units import STORED_UNITS, convert, kind_of_unit
from kinetics_db.errors import InvalidInput
from kinetics_db.runs.query import Range

EXAMPLE = "for example 50..150 mM, >= 50 mM, <= 150 mM or 50 mM, with a point in decimals"
LARGEST_SLACK = Decimal("0.05")
_QUANTITY = re.compile(
    r"(?P<number>[+-]?(?:\d{1,30}(?:\.\d{1,30})?|\.\d{1,30})(?:[eE][+-]?\d{1,3})?)?\s*(?P<unit>.*)\Z",
    re.DOTALL,
)


def looks_like_range(text: str) -> bool:
    """Whether a text begins as a range does: with a number, a sign of comparison or '..'."""
    return re.match(r"[<>≤≥]|[+-]?\.?\d|\.\.", text) is not None


def range_from_text(text: str) -> tuple[Range, str]:
    """A range in the stored unit of its kind (`engine.units.STORED_UNITS`; percent for 'relative'), and the kind.

    A single value finds what rounds to it: within half of the last digit typed, but for all but temperatures
    within 5 % at most, so that ``0.1 mol/L`` is 0.095 to 0.105 mol/L and ``40 degC`` is 39.5 to 40.5 degC.
    A single zero is exactly zero.

    Raises
    ------
    InvalidInput
        when it is no range, its units are unknown or of two kinds, or its ends are the wrong way round.
    """
    shown = text.replace("≤", "<=").replace("≥", ">=").strip()
    if re.match(r"[<>](?!=)", shown):
        raise InvalidInput("ends belong to a range", cure=f"write {shown[0]}= in place of {shown[0]}")
    if shown.startswith((">=", "<=")):
        number, unit = _quantity(shown[2:])
        value = _stored(number, unit)
        low, high = (value, None) if shown.startswith(">=") else (None, value)
        return Range(low, high, f"{shown[:2]} {number} {unit}"), kind_of_unit(unit)
    if "..." in shown or "…" in shown:  # of which the last could belong to a number
        raise InvalidInput(f"'{shown[:60]}' is no number with a unit", cure=EXAMPLE)
    if ".." in shown:
        return _between(shown)
    number, unit = _quantity(shown)
    kind = kind_of_unit(unit)
    slack = _slack(number, kind)
    ends = [_stored(str(Decimal(number) + sign * slack), unit) for sign in (-1, 1)]
    return Range(ends[0], ends[1], f"{number} {unit}"), kind


def _between(text: str) -> tuple[Range, str]:
    left, _, right = (part.strip() for part in text.partition(".."))
    (first, first_unit), (last, last_unit) = _parts(left), _parts(right)
    unit = last_unit or first_unit
    if not first and not last:
        raise InvalidInput("a range needs at least one end", cure=EXAMPLE)
    if not unit:
        raise InvalidInput("the unit is missing", cure=EXAMPLE)
    kind = kind_of_unit(unit)
    if first_unit and kind_of_unit(first_unit) != kind:
        raise InvalidInput(f"'{first_unit}' and '{unit}' measure different things", cure=EXAMPLE)
    low = _stored(first, first_unit or unit) if first else None
    high = _stored(last, unit) if last else None
    if low is not None and high is not None and low > high:
        raise InvalidInput("the range ends before it begins", cure="the smaller number first")
    beginning = f"{first} {first_unit}" if first and first_unit and last and first_unit != unit else first
    return Range(low, high, f"{beginning}..{last} {unit}"), kind


def _parts(text: str) -> tuple[str, str]:
    match = _QUANTITY.match(text)
    assert match is not None, "every text matches"
    number, unit = match["number"] or "", match["unit"].strip()
    if re.match(r"[,.\d]|[-–]\s*\d|to\b", unit):
        raise InvalidInput(f"'{text[:60]}' is no number with a unit", cure=EXAMPLE)
    if number and not math.isfinite(float(number)):
        raise InvalidInput(f"{number} is too large for a number", cure=EXAMPLE)
    return number, unit


def _quantity(text: str) -> tuple[str, str]:
    number, unit = _parts(text.strip())
    if not number:
        raise InvalidInput(f"there is no number in '{text.strip()[:60]}'", cure=EXAMPLE)
    if not unit:
        raise InvalidInput("the unit is missing", cure=EXAMPLE)
    return number, unit


def _slack(number: str, kind: str) -> Decimal:
    value = Decimal(number)
    exponent = value.as_tuple().exponent
    half = Decimal(5).scaleb(int(exponent) - 1)
    return half if kind == "temperature" else min(half, abs(value) * LARGEST_SLACK)


def _stored(number: str, unit: str) -> float:
    kind = kind_of_unit(unit)
    if kind not in STORED_UNITS:
        return float(number)  # whoever asked for another kind refuses it
    return float(convert(float(number), unit, "%" if kind == "relative" else STORED_UNITS[kind]))
