"""The unit that a rate constant has from the order of its step."""

from __future__ import annotations

import re
from fractions import Fraction

from kinetics_db.engine.network.derived import orders_of_constants
from kinetics_db.engine.network.expressions import number_text
from kinetics_db.engine.network.model import Network
from kinetics_db.errors import InvalidInput

FACTOR = re.compile(r"([^\W\d]+|%)(?:\^?([0-9]+))?")


def constant_units(network: Network, *, concentration: str = "mol/L", time: str = "s") -> dict[str, str]:
    """Unit of every constant of a network, given, fitted or computed.

    Parameters
    ----------
    network : Network
    concentration : str
        Unit of the concentrations: 'mol/L', 'mmol/L', 'percent', ...
    time : str
        Unit of the time: 's', 'min', 'h'.

    Returns
    -------
    dict name -> unit
        '1/s' for order 1, 'L/mol/s' for order 2, 'mol/L/s' for order 0, and so on; '' where the unit does
        not follow from a step, as for a parameter of a written-out law.

    Raises
    ------
    InvalidInput
        When ``concentration`` is not a unit, or a quotient of units, that can be raised to a power.
    """
    orders = orders_of_constants(network.steps)
    names = (*network.constants, *(one.name for one in network.computed))
    return {
        name: unit_of_order(orders[name][0], concentration=concentration, time=time) if name in orders else ""
        for name in names
    }


def unit_of_order(order: float, *, concentration: str = "mol/L", time: str = "s") -> str:
    """Unit of a rate constant of an overall order: (concentration)^(1 - order) / time."""
    power = 1 - Fraction(order).limit_denominator(10**9)
    factors = [(symbol, exponent * power) for symbol, exponent in _factors(concentration)]
    above = [_to_the(symbol, exponent) for symbol, exponent in factors if exponent > 0]
    below = [_to_the(symbol, -exponent) for symbol, exponent in factors if exponent < 0]
    return "/".join(["*".join(above) or "1", *below, time])


def _factors(unit: str) -> list[tuple[str, int]]:
    """Symbols of a unit with their exponents, those after a slash negative."""
    factors: list[tuple[str, int]] = []
    for part in re.split(r"(?=[*/])", unit.strip()):
        sign = -1 if part.startswith("/") else 1
        symbol = part.lstrip("*/").strip()
        if symbol == "1" and not factors:
            continue
        found = FACTOR.fullmatch(symbol)
        if not found:
            raise InvalidInput(
                f"'{unit}' as the unit of concentrations",
                field="concentration",
                cure="such as mol/L or percent",
            )
        factors.append((found[1], sign * int(found[2] or 1)))
    return factors


def _to_the(symbol: str, exponent: Fraction) -> str:
    return symbol if exponent == 1 else f"{symbol}^{number_text(float(exponent))}"
