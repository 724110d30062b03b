"""Units as chemists type them: read by a strict grammar, converted with the exact factors of pint.

Text never reaches pint's own parser. It is read here as a product of known symbols with small exponents, and
pint is asked only for the factor of a known symbol, as an exact fraction. So hostile text costs nothing, and
``5 mM`` is exactly ``0.005`` mol/L on every platform. pint is loaded at the first conversion.

Written forms: ``mmol/L``, ``L/mol/s``, ``L/(mol s)``, ``mol L-1 s-1``, ``M^-1 s^-1``, ``M**-1*s**-1``,
``mol dm⁻³``, ``s.m-1`` (UCUM, where ``.`` and ``/`` bind from left to right), ``1/s``.
"""

from __future__ import annotations

import difflib
import math
import re
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from functools import cache, lru_cache
from typing import Any, NamedTuple, TypeVar

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.unit_symbols import ALIASES, ANY_CASE, PREFIX_EXPONENT, SI, SYMBOLS, WORDS
from kinetics_db.errors import InvalidInput

Number = TypeVar("Number", float, NDArray[np.float64])

MAX_LENGTH = 60
MAX_FACTORS = 12
MAX_EXPONENT = 12

#: The units in which numbers are stored, by kind.
STORED_UNITS: Mapping[str, str] = {
    "time": "s",
    "concentration": "mol/L",
    "temperature": "K",
    "volume": "L",
    "mass": "g",
    "amount": "mol",
    "length": "m",
    "density": "g/L",
    "molar mass": "g/mol",
    "amount rate": "mol/s",
    "relative": "1",
}

_TOKEN = re.compile(
    r"(?P<power>10(?:\*|\^|\*\*)[+-]?\d{1,2})"
    r"|(?P<number>\d{1,9})"
    r"|(?P<symbol>m{1,2}\[Hg\]|\[[a-z_0]{1,8}\]|(?:mol|wt|vol)%|%|a\.u\.?|arb\.u\.|[A-Za-zµÅΩ°]{1,16})"
    r"(?P<exponent>(?:\*\*|\^)?\(?[+-]?\d{1,2}(?:\.\d{1,3})?\)?)?"
    r"|(?P<operator>[*·⋅×./()]|[ ]+)"
)
_NUMBER = re.compile(r"[+-]?(?:\d{1,30}(?:\.\d{0,30})?|\.\d{1,30})(?:[eE][+-]?\d{1,3})?")


class Quantity(NamedTuple):
    """A number with its unit, as typed."""

    value: float
    unit: str


@dataclass(frozen=True)
class _Unit:
    """Factor to base units (exact where rational), sorted (base, exponent) pairs, offset of the zero in K."""

    factor: Fraction | float
    dimension: tuple[tuple[str, Fraction], ...]
    offset: Fraction = Fraction(0)


_ONE = _Unit(Fraction(1), ())


@cache
def _registry() -> Any:
    import pint  # loaded late: it takes most of a second

    return pint.UnitRegistry(non_int_type=Fraction, cache_folder=None)


@cache
def _symbol_factor(pint_name: str) -> _Unit:
    if pint_name == "":
        return _ONE
    if pint_name.startswith("arbitrary"):
        per_second = (("second", Fraction(-1)),) if pint_name.endswith("/s") else ()
        return _Unit(Fraction(1), (("arbitrary", Fraction(1)), *per_second))
    registry = _registry()
    offset = Fraction(0)
    if pint_name.startswith("degree_") and pint_name != "degree":
        offset = registry.Quantity(Fraction(0), registry.Unit(pint_name)).to("kelvin").magnitude
        pint_name = f"delta_{pint_name}"
    quantity = registry.Quantity(Fraction(1), registry.Unit(pint_name)).to_root_units()
    bases = {str(name): Fraction(power) for name, power in quantity.unit_items() if str(name) != "radian"}
    return _Unit(Fraction(quantity.magnitude), tuple(sorted(bases.items())), Fraction(offset))


@cache
def _known() -> dict[str, tuple[str, int]]:
    """Accepted symbol -> (name in pint, power of ten); whole symbols win over prefix + symbol."""
    known: dict[str, tuple[str, int]] = {}
    for symbol, (name, prefixes) in SYMBOLS.items():
        for prefix in prefixes:
            if prefix in SI:
                known.setdefault(prefix + symbol, (name, PREFIX_EXPONENT[SI[prefix]]))
    for word, symbol in WORDS.items():
        for prefix, power in {"": 0, **PREFIX_EXPONENT}.items():
            for ending in ("", "s"):
                known[prefix + word + ending] = (SYMBOLS[symbol][0], power)
    known.update({symbol: (name, 0) for symbol, (name, _) in SYMBOLS.items()})
    known.update({"hPa": ("pascal", 2), "m[Hg]": ("millimeter_Hg", 3), "mm[Hg]": ("millimeter_Hg", 0)})
    known.update({alias: known[target] for alias, target in ALIASES.items() if alias.isalpha()})
    return known


def _clean(unit: str) -> str:
    """One Unicode form: both micro signs, superscripts and dashes become the plain characters."""
    text = unicodedata.normalize("NFKC", unit.replace("ºC", "°C").replace("⋅", "·"))
    for odd, usual in (("μ", "µ"), ("−", "-"), ("–", "-"), ("⁄", "/"), ("Å", "Å")):
        text = text.replace(odd, usual)
    text = text.strip()
    return ALIASES.get(text, text)


def _refuse(unit: str, why: str, cure: str = "for example mmol/L, min, degC, L/mol/s") -> InvalidInput:
    shown = unit if len(unit) <= MAX_LENGTH else unit[:MAX_LENGTH] + "..."
    return InvalidInput(f"{why}: {shown!r}", field="unit", cure=cure)


class _UnknownSymbolError(Exception):
    """Raised inside; the search for near symbols is only worth its time when the message is shown."""


def _unknown(unit: str, symbol: str) -> InvalidInput:
    known = _known()
    same_letters = [k for k in known if k.lower() == symbol.lower()]
    near = dict.fromkeys(same_letters + difflib.get_close_matches(symbol, list(known), n=3, cutoff=0.6))
    if near:
        return _refuse(
            unit, f"unknown unit '{symbol}' in", "did you mean " + " or ".join(list(near)[:4]) + "?"
        )
    return _refuse(unit, f"unknown unit '{symbol}' in")


def _power(unit: _Unit, exponent: Fraction) -> _Unit:
    if exponent == 1:
        return unit
    whole = exponent.denominator == 1 and isinstance(unit.factor, Fraction)
    factor = unit.factor ** int(exponent) if whole else float(unit.factor) ** float(exponent)
    return _Unit(factor, tuple((base, power * exponent) for base, power in unit.dimension))


def _times(left: _Unit, right: _Unit) -> _Unit:
    powers = dict(left.dimension)
    for base, power in right.dimension:
        powers[base] = powers.get(base, Fraction(0)) + power
    dimension = tuple(sorted((base, power) for base, power in powers.items() if power))
    return _Unit(left.factor * right.factor, dimension)


def _atom(match: re.Match[str], unit: str, *, alone: bool) -> _Unit:
    if match["power"]:
        return _Unit(Fraction(10) ** int(match["power"].lstrip("10").lstrip("*^") or 0), ())
    if match["number"]:
        if int(match["number"]) == 0:
            raise _refuse(unit, "a unit of zero size")
        return _Unit(Fraction(int(match["number"])), ())
    symbol = match["symbol"]
    if symbol not in _known() and len(symbol) > 2 and symbol.lower() in ANY_CASE:
        symbol = (
            symbol.lower()
        )  # instruments write Min, SEC, Hours; no symbol differs from these by case alone
    if symbol not in _known():
        raise _UnknownSymbolError(symbol)
    name, ten = _known()[symbol]
    found = _symbol_factor(name)
    if found.offset and (match["exponent"] or not alone):
        raise _refuse(unit, f"'{symbol}' has its zero elsewhere and cannot be part of a product", "write K")
    found = _Unit(found.factor * Fraction(10) ** ten, found.dimension, found.offset)
    if not match["exponent"]:
        return found
    exponent = Fraction(match["exponent"].lstrip("*^").strip("()"))
    if not 0 < abs(exponent) <= MAX_EXPONENT:
        raise _refuse(unit, "an exponent is zero or too large", f"from -{MAX_EXPONENT} to {MAX_EXPONENT}")
    return _power(found, exponent)


def _tokens(unit: str) -> list[re.Match[str]]:
    text = re.sub(r"\bper\b", "/", _clean(unit))
    text = re.sub(r" *([*·×./()]+) *", r"\1", text) if "a.u" not in text else text
    found: list[re.Match[str]] = []
    position = 0
    while position < len(text):
        match = _TOKEN.match(text, position)
        if match is None:
            raise _refuse(unit, f"cannot read '{text[position]}' in the unit")
        found.append(match)
        position = match.end()
    if sum(1 for m in found if not m["operator"]) > MAX_FACTORS:
        raise _refuse(unit, "too many factors in the unit")
    return found


def _loose_number(matches: list[re.Match[str]]) -> bool:
    """Whether a number stands a blank away from a factor, as in ``h 30``: a second value, not 30 hours."""
    for i, match in enumerate(matches):
        sides = [m["operator"] for m in (*matches[max(0, i - 1) : i], *matches[i + 1 : i + 2])]
        whole = match["number"] == "1" and sides[-1:] == ["/"]  # M 1/s is M times 1/s
        if match["number"] and not whole and any(side is not None and side.isspace() for side in sides):
            return True
    return False


def numbers_in(unit: str) -> list[str]:
    """Numbers among the factors of a unit, powers of ten too, and symbols with an exponent of 1 as in ``h01``.

    Beside a value they would scale it unseen, or are a second value. InvalidInput for text that is no unit.
    """
    _parse(unit)
    if _clean(unit) in ("", "1"):
        return list(_clean(unit))
    return [
        match.group()
        for match in _tokens(unit)
        if match["power"] or match["number"] or re.fullmatch(r"\(?0*1\)?", match["exponent"] or "")
    ]


def _parse(unit: str) -> _Unit:
    if not isinstance(unit, str):
        raise InvalidInput(f"a unit is text, not {type(unit).__name__}", field="unit")
    try:
        return _read(unit)
    except _UnknownSymbolError as error:
        raise _unknown(unit, error.args[0]) from None


@lru_cache(maxsize=4096)
def _read(unit: str) -> _Unit:
    if len(unit) > MAX_LENGTH:
        raise _refuse(unit, "the unit is too long", f"at most {MAX_LENGTH} characters")
    if _clean(unit) in ("", "1"):
        return _ONE
    matches = _tokens(unit)
    if _loose_number(matches):
        raise _refuse(unit, "a number stands beside a unit without a sign", "write 4*s, or s^2 for a power")
    alone = len(matches) == 1
    result, sign, group_sign = _ONE, 1, 1
    expects_factor, depth, slashes, closed = True, 0, 0, False
    for match in matches:
        operator = match["operator"]
        if operator is None:
            if not expects_factor and not (closed and match["symbol"]):  # M-1s-1 has only one reading
                raise _refuse(unit, "two units stand without a sign between them")
            closed = "-" in (match["exponent"] or "")
            factor = _atom(match, unit, alone=alone)
            result = _times(result, _power(factor, Fraction(sign * group_sign))) if not alone else factor
            expects_factor = False
        elif operator == "(":
            if not expects_factor or depth:
                raise _refuse(unit, "a bracket stands where none can")
            depth, group_sign, sign, expects_factor = 1, sign, 1, True
        elif operator == ")":
            if expects_factor or not depth:
                raise _refuse(unit, "brackets do not match")
            depth, group_sign, sign = 0, 1, 1
        else:
            if expects_factor and not (operator == "/" and match is matches[0]):
                raise _refuse(unit, "a sign stands without a unit beside it")
            if operator != "/" and operator != "." and slashes and not depth:
                raise _refuse(
                    unit, "a product after '/' can be read in two ways", "write L/mol/s or L/(mol s)"
                )
            if operator == "/" and depth:
                raise _refuse(unit, "'/' stands inside brackets")
            slashes += operator == "/"
            sign = -1 if operator == "/" else 1
            expects_factor = True
    if expects_factor or depth:
        raise _refuse(unit, "the unit ends too early")
    if not (isinstance(result.factor, Fraction) or (math.isfinite(result.factor) and result.factor > 0)):
        raise _refuse(unit, "the unit is too large or too small for a number")
    return result


_DIMENSIONS: Mapping[tuple[tuple[str, int], ...], str] = {
    (): "relative",
    (("second", 1),): "time",
    (("second", -1),): "per time",
    (("meter", -3), ("mole", 1)): "concentration",
    (("meter", -3), ("mole", 1), ("second", -1)): "rate",
    (("gram", 1),): "mass",
    (("meter", 3),): "volume",
    (("mole", 1),): "amount",
    (("mole", 1), ("second", -1)): "amount rate",
    (("kelvin", 1),): "temperature",
    (("meter", 1),): "length",
    (("gram", 1), ("meter", -3)): "density",
    (("gram", 1), ("mole", -1)): "molar mass",
    (("gram", 1), ("meter", 2), ("second", -3)): "power",
    (("gram", 1), ("meter", 2), ("second", -2)): "energy",
    (("gram", 1), ("meter", 2), ("mole", -1), ("second", -2)): "molar energy",
    (("gram", 1), ("meter", -1), ("second", -2)): "pressure",
    (("arbitrary", 1),): "arbitrary",
}


def _as_float(ratio: Fraction | float) -> float:
    try:
        return float(ratio)
    except OverflowError:
        return math.inf


def kind_of_unit(unit: str) -> str:
    """What a unit measures, in a word: 'time', 'concentration', 'mass', ... or 'other'.

    'relative' is a pure number (``1``, ``%``, ``ppm``), 'arbitrary' an instrument's own scale (``a.u.``).
    InvalidInput for an unknown unit.
    """
    dimension = _parse(unit).dimension
    if any(power.denominator != 1 for _, power in dimension):
        return "other"
    return _DIMENSIONS.get(tuple((base, int(power)) for base, power in dimension), "other")


def is_unit(text: str) -> bool:
    """Whether the text is a unit that `convert` knows ('' is none)."""
    try:
        _read(text)
    except (InvalidInput, _UnknownSymbolError):
        return False
    return bool(text.strip())


def convert(value: Number, unit: str, to: str, *, difference: bool = False) -> Number:
    """Value in another unit.

    Parameters
    ----------
    value : float or ndarray of any shape, in ``unit``; missing values stay missing
    difference : True for a temperature difference or an uncertainty, where 1 degC is 1 K and no zero is moved

    Raises
    ------
    InvalidInput
        for an unknown unit, units of different kinds, or a result that is not finite.
    """
    source, target = _parse(unit), _parse(to)
    if source.dimension != target.dimension:
        cure = f"a unit of {kind_of_unit(to)} such as {to}"
        if _clean(unit) == "C" and kind_of_unit(to) == "temperature":
            cure = "'C' is the coulomb; write degC"
        raise InvalidInput(
            f"'{unit}' ({kind_of_unit(unit)}) cannot become '{to}' ({kind_of_unit(to)})",
            field="unit",
            cure=cure,
        )
    offsets = Fraction(0) if difference else source.offset - target.offset
    ratio = source.factor / target.factor
    with np.errstate(over="ignore"):
        if isinstance(ratio, Fraction) and max(ratio.numerator, ratio.denominator) <= 2**53:
            # One rounding for a ratio such as 1/1000, which a multiplication by 0.001 would round twice.
            scaled = value * float(ratio.numerator) / float(ratio.denominator)
        else:
            scaled = value * _as_float(ratio)
        result = scaled + float(offsets / Fraction(target.factor)) if offsets else scaled
    lost = (~np.isfinite(result) & np.isfinite(value)) | ((scaled == 0) & (np.asarray(value) != 0))
    if np.any(lost):
        raise InvalidInput(f"a value in '{to}' is too large or too small for a number", field="value")
    return result


def to_stored(value: Number, unit: str, kind: str, *, difference: bool = False) -> Number:
    """Value in the stored unit of its kind (`STORED_UNITS`); InvalidInput for a unit of another kind."""
    return convert(value, unit, STORED_UNITS[kind], difference=difference)


def parse_quantity(text: str) -> Quantity:
    """Number and unit of a text such as ``12.3 mg``; the unit of a bare number is ''.

    Raises
    ------
    InvalidInput
        for text without a number, with an unknown unit, a decimal comma, a second number (also one that a
        unit could hold as a factor: ``12 mg 5``, ``1 mM 10*3``), or a number that is not finite.
    """
    if not isinstance(text, str) or len(text) > 2 * MAX_LENGTH:
        raise InvalidInput("not a number with a unit", field="value", cure="for example 12.3 mg")
    stripped = text.strip().replace("−", "-")
    match = _NUMBER.match(stripped)
    if match is None:
        raise InvalidInput(f"no number in {text!r}", field="value", cure="for example 12.3 mg")
    rest = stripped[match.end() :]
    if re.match(r"[,.]\s*\d", rest):
        raise InvalidInput(f"{text!r} has more than one decimal sign", field="value", cure="write 12.3 mg")
    if re.search(r"(?:^|\s)\d", rest):
        raise InvalidInput(f"{text!r} holds two numbers", field="value", cure="for example 12.3 mg")
    value = float(match.group())
    if not math.isfinite(value):
        raise InvalidInput(f"{match.group()} is too large for a number", field="value")
    if rest.strip() and numbers_in(rest.strip()):
        raise InvalidInput(f"{text!r} holds two numbers", field="value", cure="for example 12.3 mg")
    return Quantity(value, rest.strip())
