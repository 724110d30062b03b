"""Column headers: names with their units in many writings."""

from __future__ import annotations

import re
from typing import NamedTuple

from kinetics_db.engine.units import MAX_LENGTH, is_unit, kind_of_unit, numbers_in

_TIME_WORDS = re.compile(
    r"t|t_?\d?|(?:.{0,30}[ _])?(?:time|zeit|temps|tiempo|tempo|tid|tijd|aika|zeitpunkt|reaktionszeit)"
    r"(?:[ _].{0,30})?|time ?stamp|timepoint",
    re.IGNORECASE,
)
_CLOCK_FORMS = {
    "mm:ss": "mm:ss", "m:ss": "mm:ss", "min:s": "mm:ss", "min:sec": "mm:ss", "mm:ss.s": "mm:ss",
    "h:mm": "h:mm", "hh:mm": "h:mm", "h:min": "h:mm",
    "h:mm:ss": "h:mm:ss", "hh:mm:ss": "h:mm:ss", "h:min:s": "h:mm:ss",
}  # fmt: skip
_BRACKETED = re.compile(
    r"(?P<name>.*\S)\s*[(\[{](?:in )?(?P<unit>[^()\[\]{}]{1,40}(?:\([^()]*\))?)[)\]}]", re.DOTALL
)


_CAPITALS = frozenset("ACJNSTVW")  # units that are likelier to be names of species


class Header(NamedTuple):
    """A column's name and unit (None when none is stated); ``clock`` is a form such as 'mm:ss'."""

    name: str
    unit: str | None = None
    clock: str = ""

    @property
    def is_time(self) -> bool:
        """By its name, or by being nothing but a unit of time."""
        named = _TIME_WORDS.fullmatch(self.name) is not None
        return named and (self.unit is None or kind_of_unit(self.unit) == "time")


def parse_header(text: str) -> Header:
    """Name and unit of ``t / min``, ``Time [min]``, ``c(A) in mM``, ``time_s``, ``[A] / mM``, ``min``."""
    text = " ".join(text.split())
    if len(text) > 500:
        return Header(text)
    for split in _splits(text):
        name, unit = split
        if unit.lower() in _CLOCK_FORMS:
            return Header(name, None, _CLOCK_FORMS[unit.lower()])
        if _is_written_unit(unit):
            return Header(name, unit)
    words = re.fullmatch(r"(.*[^\s_,])(?:[ _]|, ?)([^\s_]{1,20})", text)
    if (
        words
        and _is_written_unit(words[2])
        and kind_of_unit(words[2]) == "time"
        and _TIME_WORDS.fullmatch(words[1])
    ):
        return Header(words[1], words[2])
    if text not in ("t", "d") and _is_written_unit(text) and kind_of_unit(text) == "time":
        return Header("time", text)
    return Header(text)


def _splits(text: str) -> list[tuple[str, str]]:
    """Ways to split a header into name and unit, the likeliest first."""
    found = []
    bracketed = _BRACKETED.fullmatch(text)
    if bracketed and not _is_label(text, bracketed):
        found.append((bracketed["name"].rstrip(" /,;:"), bracketed["unit"].strip()))
    for sign in (" in ", "/", ","):
        start = text.find(sign)
        while start > 0:
            name, unit = text[:start].strip(), text[start + len(sign) :].strip()
            # A/C is a ratio of two signals rather than A in coulombs; A / C with blanks is a unit.
            ratio = unit in _CAPITALS and not (sign == "/" and text[start - 1] == " ")
            if name and 0 < len(unit) <= MAX_LENGTH and not ratio:
                found.append((name, unit.strip("()[] ") if unit[0] in "([" else unit))
            start = text.find(sign, start + 1) if len(found) < 20 else -1
    return found


def _is_written_unit(unit: str) -> bool:
    """A unit that can stand in a header; '2', '90 s' and 's*60' are values, though arithmetic could take them."""
    if not is_unit(unit) or (unit[0].isdigit() and unit != "1" and not unit.startswith(("1/", "10^", "10*"))):
        return False
    return all(number == "1" or number.startswith(("10^", "10*")) for number in numbers_in(unit))


def _is_label(text: str, bracketed: re.Match[str]) -> bool:
    """Whether a bracket names a species or a peak, as in c(A), I(S) or peak (1), rather than a unit."""
    unit, name = bracketed["unit"].strip(), bracketed["name"].lower()
    if unit == "1" or unit in _CAPITALS:
        return True
    attached = text[bracketed.end("name")] != " "
    usual = (unit == "K" and name.startswith("t")) or (unit == "M" and name.startswith("conc"))
    return attached and unit in ("K", "M") and not usual


def is_units_row(cells: list[str]) -> bool:
    """Whether every cell is a unit, a clock form or empty, and at least one is a unit with a name."""
    units = [unit_of_cell(cell) for cell in cells]
    return all(unit is not None for unit in units) and any(unit not in ("", "1") for unit in units)


def unit_of_cell(cell: str) -> str | None:
    """Unit in a cell of a units row; '' for an empty cell, None when it is no unit."""
    unit = cell.strip().strip("()[]").strip()
    if unit in ("", "-"):
        return ""
    return unit if _is_written_unit(unit) or unit.lower() in _CLOCK_FORMS else None


def is_time_unit(cell: str) -> bool:
    """Whether a cell of a units row is a unit of time or a clock form."""
    unit = unit_of_cell(cell) or ""
    return unit != "" and (unit.lower() in _CLOCK_FORMS or kind_of_unit(unit) == "time")


def has_unit_of_signal(cells: list[str]) -> bool:
    """Whether a cell is a unit other than of time, and not likelier the name of a species."""
    units = [unit_of_cell(cell) for cell in cells if not is_time_unit(cell)]
    return any(unit and unit not in _CAPITALS and unit != "1" for unit in units)


def with_unit(header: Header, unit: str) -> Header:
    """The header with the unit of the row below it."""
    if unit.lower() in _CLOCK_FORMS:
        return Header(header.name, None, _CLOCK_FORMS[unit.lower()])
    return Header(header.name, unit) if unit else header
