"""Numbers as people read them: value with its uncertainty, intervals, probabilities.

Rounding works on the shortest decimal text of a float, so that 0.15 is rounded as the 0.15 it was typed as.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal
from typing import TypeGuard

from django.utils.html import format_html
from django.utils.safestring import SafeString

NOTHING = "–"
MINUS = "−"
SMALLEST_PLAIN, LARGEST_PLAIN = -2, 4  # powers of ten that are written without a factor 10ⁿ
MOST_DIGITS = 15  # a float has no more

_EXPONENT = re.compile(r"\^(-?\d+)(?![\d.])")
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@dataclass(frozen=True)
class Shown:
    """A number as it is read, and as it is copied: every digit, with the unit."""

    text: str
    exact: str = ""
    value: str = ""

    @property
    def html(self) -> SafeString:
        """The reading text, with the exact number to point at and for programs."""
        if not self.exact:
            return format_html("{}", self.text)
        return format_html('<data value="{}" title="{}">{}</data>', self.value, self.exact, self.text)

    def __str__(self) -> str:
        return self.text


def shown(value: float | None, uncertainty: float | None = None, unit: str = "", *, digits: int = 4) -> Shown:
    """A value for a page: '5.926(52) × 10⁻⁵ 1/s' where its uncertainty is known, else with ``digits`` digits."""
    if not _is_number(value):
        return Shown(NOTHING)
    exact = f"{value!r} {unit}".strip()
    if _is_number(uncertainty) and uncertainty > 0:
        exact += f", standard uncertainty {uncertainty!r}"
        return Shown(with_uncertainty(value, uncertainty, unit), exact, repr(value))
    return Shown(plain(value, unit, digits=digits), exact, repr(value))


def with_uncertainty(value: float | None, uncertainty: float | None, unit: str = "") -> str:
    """Value with its standard uncertainty, two digits of it, in the last digits of the value: '1.234(56)'.

    Where the uncertainty reaches beyond the decimal point it is written with one, '12.3(4.5)', which JCGM
    100:2008, 7.2.2 allows too and which nobody can misread. Without an uncertainty above zero, the plain
    value; '–' without a value.
    """
    if not _is_number(value):
        return NOTHING
    if not _is_number(uncertainty) or uncertainty <= 0:
        return plain(value, unit)
    number, spread = _decimal(value), _decimal(uncertainty)
    if number and number.adjusted() - spread.adjusted() >= MOST_DIGITS - 1:
        return plain(value, unit, digits=MOST_DIGITS)  # the spread is finer than the number itself
    last = spread.adjusted() - 1
    spread = _rounded(spread, last)
    if spread.adjusted() - last > 1:  # 0.0996 became 0.100
        last += 1
        spread = _rounded(spread, last)
    number = _rounded(number, last)
    power = _power(max(abs(number), spread))
    if not power and last > 0:  # digits before the decimal point are uncertain
        power = max(abs(number), spread).adjusted()
    decimals = power - last
    number, spread = number.scaleb(-power), spread.scaleb(-power)
    inside = f"{spread:.{decimals}f}" if decimals and spread >= 1 else str(int(spread.scaleb(decimals)))
    return _joined(f"{_digits(number, decimals)}({inside})", power, unit)


def plain(value: float | None, unit: str = "", *, digits: int = 4, rounding: str = ROUND_HALF_EVEN) -> str:
    """A value without an uncertainty, rounded to significant digits; trailing zeros would claim one."""
    if not _is_number(value):
        return NOTHING
    number = _decimal(value)
    if not number:
        return _joined("0", 0, unit)
    number = _rounded(number, number.adjusted() - digits + 1, rounding)
    power = _power(number)
    number = number.scaleb(-power).normalize()
    decimals = max(0, -int(number.as_tuple().exponent))
    return _joined(_digits(number, decimals), power, unit)


def interval(low: float | None, high: float | None, unit: str = "") -> str:
    """Both ends rounded outwards: '(5.82 to 6.03) × 10⁻⁵ 1/s'; one end is a bound, '> 30 1/s'."""
    if not _is_number(low) and not _is_number(high):
        return NOTHING
    if not _is_number(high):
        return f"> {plain(low, unit, digits=2, rounding=ROUND_FLOOR)}"
    if not _is_number(low):
        return f"< {plain(high, unit, digits=2, rounding=ROUND_CEILING)}"
    below, above = _decimal(low), _decimal(high)
    if below >= above:
        return plain(low, unit)
    last = max((above - below).adjusted() - 1, max(abs(below), abs(above)).adjusted() - MOST_DIGITS + 1)
    rounded = _rounded(below, last, ROUND_FLOOR), _rounded(above, last, ROUND_CEILING)
    if (below and not rounded[0]) or (
        above and not rounded[1]
    ):  # ends of different size need their own digits
        ends = plain(low, digits=2, rounding=ROUND_FLOOR), plain(high, digits=2, rounding=ROUND_CEILING)
        return f"{ends[0]} to {ends[1]} {unit_text(unit)}".rstrip()
    power = _power(max(abs(rounded[0]), abs(rounded[1])))
    decimals = max(0, power - last)
    text = " to ".join(_digits(end.scaleb(-power), decimals) for end in rounded)
    return _joined(f"({text})" if power else text, power, unit)


def probability(p: float | None) -> str:
    """A p-value: two digits, so that none is rounded onto a threshold; the far ends by their bounds."""
    if not _is_number(p):
        return NOTHING
    if p < 1e-4:
        return "< 0.0001"
    if p > 0.999:
        return "> 0.999"
    last = max(min(-2, _decimal(p).adjusted() - 1), -5) if p < 0.99 else -3
    return _digits(_rounded(_decimal(p), last), -last)


def percent(share: float | None) -> str:
    """A share as a percentage, two digits: 0.0213 is '2.1 %'."""
    return NOTHING if not _is_number(share) else f"{_two_digits(100.0 * share)} %"


def difference(value: float | None) -> str:
    """A difference of a criterion such as AICc to one decimal, thousands apart: '1 204.3'."""
    if not _is_number(value):
        return NOTHING
    whole = f"{_rounded(_decimal(value), -1):,.1f}".replace(",", "\N{NARROW NO-BREAK SPACE}")
    return ("0.0" if whole == "-0.0" else whole).replace("-", MINUS)


def _two_digits(value: float) -> str:
    number = _decimal(value)
    if not number:
        return "0"
    last = min(number.adjusted() - 1, 0)
    rounded = _rounded(number, last)
    if last < 0 and rounded.adjusted() - last > 1:  # 9.96 became 10.0
        last += 1
        rounded = _rounded(number, last)
    return _digits(rounded, -last)


def _is_number(value: float | None) -> TypeGuard[float]:
    return value is not None and math.isfinite(value)


def _decimal(value: float) -> Decimal:
    return Decimal(repr(float(value)))


def _rounded(number: Decimal, last: int, rounding: str = ROUND_HALF_EVEN) -> Decimal:
    """Rounded to a multiple of 10**last."""
    return number.quantize(Decimal(1).scaleb(last), rounding=rounding)


def _power(size: Decimal) -> int:
    """The power of ten to take out, 0 where the number reads well as it is."""
    if not size or SMALLEST_PLAIN <= size.adjusted() <= LARGEST_PLAIN:
        return 0
    return size.adjusted()


def _digits(number: Decimal, decimals: int) -> str:
    text = f"{number:.{decimals}f}"
    return (text.lstrip("-") if not number else text).replace("-", MINUS)


def _joined(digits: str, power: int, unit: str) -> str:
    factor = f" × 10{str(power).translate(_RAISED)}" if power else ""
    return f"{digits}{factor} {unit_text(unit)}".rstrip()


def unit_text(unit: str) -> str:
    """A unit with its whole exponents raised: 'L^2/mol^2/s' is read as 'L²/mol²/s'."""
    return _EXPONENT.sub(lambda found: found[1].translate(_RAISED), unit)
