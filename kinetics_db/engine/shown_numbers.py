"""Numbers as people read them: value with its uncertainty, intervals, probabilities, in letters of a page or ASCII.

Rounding works on the shortest decimal text of a float, so that 0.15 is rounded as the 0.15 it was typed as.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal
from typing import TypeGuard

SMALLEST_PLAIN, LARGEST_PLAIN = -2, 4  # powers of ten that are written without a factor 10ⁿ
MOST_DIGITS = 15  # a float has no more
LARGEST_WRITTEN_OUT = 1_000_000  # differences and percentages from here on have few digits and a power of ten

_EXPONENT = re.compile(r"\^(-?\d+)(?![\d.])")
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@dataclass(frozen=True)
class Style:
    """The letters a number is written with.

    Attributes
    ----------
    nothing : stands where there is no number
    minus : the sign of a negative number
    thousands : stands between groups of three digits of a difference
    times_ten : stands before a power of ten
    raised : whether powers of ten and whole exponents in units are raised letters
    """

    nothing: str
    minus: str
    thousands: str
    times_ten: str
    raised: bool

    def power_of_ten(self, power: int) -> str:
        """A factor ' × 10⁻³' or 'e-3'; nothing for the power 0."""
        if not power:
            return ""
        return self.times_ten + (str(power).translate(_RAISED) if self.raised else str(power))

    def unit(self, unit: str) -> str:
        """A unit, with its whole exponents raised if letters are: 'L^2/mol^2/s' is read as 'L²/mol²/s'."""
        return _EXPONENT.sub(lambda found: found[1].translate(_RAISED), unit) if self.raised else unit


PAGE = Style(nothing="–", minus="−", thousands="\N{NARROW NO-BREAK SPACE}", times_ten=" × 10", raised=True)
TERMINAL = Style(nothing="-", minus="-", thousands="", times_ten="e", raised=False)


def with_uncertainty(
    value: float | None, uncertainty: float | None, unit: str = "", *, style: Style = PAGE
) -> str:
    """Value with its standard uncertainty, two digits of it, in the last digits of the value: '1.234(56)'.

    Where the uncertainty reaches beyond the decimal point it is written with one, '12.3(4.5)', which JCGM
    100:2008, 7.2.2 allows too and which nobody can misread. Without an uncertainty above zero, the plain
    value; '–' without a value.
    """
    if not is_number(value):
        return style.nothing
    if not is_number(uncertainty) or uncertainty <= 0:
        return plain(value, unit, style=style)
    number, spread = _decimal(value), _decimal(uncertainty)
    if number and number.adjusted() - spread.adjusted() >= MOST_DIGITS - 1:
        # The spread is finer than the number itself.
        return plain(value, unit, digits=MOST_DIGITS, style=style)
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
    return _joined(f"{_digits(number, decimals, style)}({inside})", power, unit, style)


def plain(
    value: float | None,
    unit: str = "",
    *,
    digits: int = 4,
    rounding: str = ROUND_HALF_EVEN,
    style: Style = PAGE,
) -> str:
    """A value without an uncertainty, rounded to significant digits; trailing zeros would claim one."""
    if not is_number(value):
        return style.nothing
    return _significant(_decimal(value), unit, digits, rounding, style)


def interval(low: float | None, high: float | None, unit: str = "", *, style: Style = PAGE) -> str:
    """Both ends rounded outwards: '(5.82 to 6.03) × 10⁻⁵ 1/s'; one end is a bound, '> 30 1/s'."""
    if not is_number(low) and not is_number(high):
        return style.nothing
    if not is_number(high):
        return f"> {plain(low, unit, digits=2, rounding=ROUND_FLOOR, style=style)}"
    if not is_number(low):
        return f"< {plain(high, unit, digits=2, rounding=ROUND_CEILING, style=style)}"
    below, above = _decimal(low), _decimal(high)
    if below >= above:
        return plain(low, unit, style=style)
    last = max((above - below).adjusted() - 1, max(abs(below), abs(above)).adjusted() - MOST_DIGITS + 1)
    rounded = _rounded(below, last, ROUND_FLOOR), _rounded(above, last, ROUND_CEILING)
    if (below and not rounded[0]) or (above and not rounded[1]):
        # Ends of different size need their own digits.
        start = plain(low, digits=2, rounding=ROUND_FLOOR, style=style)
        end = plain(high, digits=2, rounding=ROUND_CEILING, style=style)
        return _joined(f"{start} to {end}", 0, unit, style)
    power = _power(max(abs(rounded[0]), abs(rounded[1])))
    decimals = max(0, power - last)
    text = " to ".join(_digits(end.scaleb(-power), decimals, style) for end in rounded)
    return _joined(f"({text})" if power else text, power, unit, style)


def probability(p: float | None, *, style: Style = PAGE) -> str:
    """A p-value: two digits, so that none is rounded onto a threshold; the far ends by their bounds."""
    if not is_number(p):
        return style.nothing
    if p < 1e-4:
        return "< 0.0001"
    if p > 0.999:
        return "> 0.999"
    last = max(min(-2, _decimal(p).adjusted() - 1), -5) if p < 0.99 else -3
    return _digits(_rounded(_decimal(p), last), -last, style)


def percent(share: float | None, *, style: Style = PAGE) -> str:
    """A share as a percentage, two digits: 0.0213 is '2.1 %'; from a million on as '1.2 × 10⁷ %'."""
    if not is_number(share):
        return style.nothing
    number = _decimal(share).scaleb(2)
    if abs(number) >= LARGEST_WRITTEN_OUT:
        return _significant(number, "%", 2, ROUND_HALF_EVEN, style)
    return f"{_two_digits(number, style)} %"


def difference(value: float | None, *, style: Style = PAGE) -> str:
    """A difference of a criterion such as AICc to one decimal, thousands apart: '1 204.3'.

    From a million on no decimal tells anything, and it is written as '1.204 × 10⁶'.
    """
    if not is_number(value):
        return style.nothing
    if abs(value) >= LARGEST_WRITTEN_OUT:
        return plain(value, style=style)
    whole = f"{_rounded(_decimal(value), -1):,.1f}"
    whole = "0.0" if whole == "-0.0" else whole
    return whole.replace(",", style.thousands).replace("-", style.minus)


def is_number(value: float | None) -> TypeGuard[float]:
    """Whether there is a value that can be written: neither None nor infinite nor not a number."""
    return value is not None and math.isfinite(value)


def _significant(number: Decimal, unit: str, digits: int, rounding: str, style: Style) -> str:
    if not number:
        return _joined("0", 0, unit, style)
    number = _rounded(number, number.adjusted() - digits + 1, rounding)
    power = _power(number)
    number = number.scaleb(-power).normalize()
    decimals = max(0, -int(number.as_tuple().exponent))
    return _joined(_digits(number, decimals, style), power, unit, style)


def _two_digits(number: Decimal, style: Style) -> str:
    if not number:
        return "0"
    last = min(number.adjusted() - 1, 0)
    rounded = _rounded(number, last)
    if last < 0 and rounded.adjusted() - last > 1:  # 9.96 became 10.0
        last += 1
        rounded = _rounded(number, last)
    return _digits(rounded, -last, style)


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


def _digits(number: Decimal, decimals: int, style: Style) -> str:
    text = f"{number:.{decimals}f}"
    return (text.lstrip("-") if not number else text).replace("-", style.minus)


def _joined(digits: str, power: int, unit: str, style: Style) -> str:
    return f"{digits}{style.power_of_ten(power)} {style.unit(unit)}".rstrip()
