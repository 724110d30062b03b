"""Powers of concentrations and their slopes, also where a concentration runs out.

x^n with 0 < n < 1 has an infinite slope at zero, and a species that is consumed in such an order reaches zero
at a finite time: no step is small enough there. Within a width below which a concentration is not known
anyway, such a power is therefore continued by the odd cubic that has its value and slope at the width,

    x^n  ->  w^n u (3 - n - (1 - n) u^2) / 2,    u = x / w,    |u| < 1,

which rises throughout, has a finite slope at zero and lets the species fade away exponentially. At the width
and above it nothing changes. The difference is below w^n.
"""

from __future__ import annotations

import math

SMALLEST_BASE = 1e-30
"""Below this a concentration is treated as this in a power that would be infinite at zero."""


def power(base: float, exponent: float) -> float:
    """base^exponent, continued to bases below zero as an odd function unless the exponent is an integer.

    A concentration that rounding leaves a hair below zero so keeps a finite rate that leads back to zero.
    A negative power of zero is that of `SMALLEST_BASE`.
    """
    if exponent < 0 and abs(base) < SMALLEST_BASE:
        base = SMALLEST_BASE
    if base < 0 and exponent != math.floor(exponent):
        return -math.pow(-base, exponent)
    return math.pow(base, exponent)


def slope_of_power(base: float, exponent: float) -> float:
    """d power / d base, without the factor `exponent`; even in the base where the power is odd."""
    if base < 0 and exponent != math.floor(exponent):
        base = -base
    return power(base, exponent - 1.0)


def root(base: float, exponent: float, width: float = 1.0) -> float:
    """`power`, with the cubic within the width when the exponent is between 0 and 1."""
    if abs(base) >= width or not 0.0 < exponent < 1.0:
        return power(base, exponent)
    u = base / width
    return math.pow(width, exponent) * u * (3.0 - exponent - (1.0 - exponent) * u * u) / 2.0


def slope_of_root(base: float, exponent: float, width: float = 1.0) -> float:
    """d root / d base, without the factor `exponent`."""
    if abs(base) >= width or not 0.0 < exponent < 1.0:
        return slope_of_power(base, exponent)
    u = base / width
    slope = (3.0 - exponent - 3.0 * (1.0 - exponent) * u * u) / 2.0
    return math.pow(width, exponent - 1.0) * slope / exponent


def power_by_exponent(base: float, exponent: float) -> float:
    """d power / d exponent; zero at a base of zero, its limit for a positive exponent."""
    return power(base, exponent) * math.log(abs(base)) if base != 0.0 else 0.0


def root_by_exponent(base: float, exponent: float) -> float:
    """d root / d exponent at a width of one."""
    if abs(base) >= 1.0 or not 0.0 < exponent < 1.0:
        return power_by_exponent(base, exponent)
    return base * (base * base - 1.0) / 2.0


def reach(width: float, exponent: float) -> float:
    """The width where it matters; one, by which nothing is rounded, where the exponent is not between 0 and 1."""
    return width if 0.0 < exponent < 1.0 else 1.0
