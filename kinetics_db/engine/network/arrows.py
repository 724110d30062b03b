"""The arrow of a step: what stands before, over and after it, and what a mistyped one was meant to be."""

from __future__ import annotations

import re
from typing import NamedTuple

from kinetics_db.engine.network.grammar import Parsed, Place, parse_with_places
from kinetics_db.engine.network.lines import Line
from kinetics_db.engine.network.syntax import FUNCTION_NAMES
from kinetics_db.engine.network.tokens import (
    MAX_NAME_LENGTH,
    NUMBER,
    RESERVED,
    is_parameter_name,
    normal_name,
    refuse,
)
from kinetics_db.errors import InvalidInput

ONE_WAY = "--k-->"
BOTH_WAYS = "<--k_f / k_b-->"
ARROW_LIKE = re.compile(r"<?[-–—−=]+>|<[-–—−=]+|--|[→⟶⇌⇄⇆↔⇋➔]|[–—−]")


class Arrow(NamedTuple):
    """Extent of an arrow in its line and what stands over it: one constant, two, or a written-out law."""

    start: int
    end: int
    constants: tuple[Place, ...]
    law: Parsed | None
    law_column: int = 0


class Extent(NamedTuple):
    """Where an arrow begins and ends, and where the text over it does; indices into the line."""

    start: int
    inside_start: int
    inside_end: int
    end: int
    reversible: bool


def has_arrow(masked: str) -> bool:
    """Whether a line looks like a step, be its arrow right or mistyped."""
    return ARROW_LIKE.search(masked) is not None


def find_arrow(line: Line) -> Extent:
    """Extent of the one arrow of a line; InvalidInput says what a mistyped arrow should look like."""
    masked, number = line.masked, line.number
    start = masked.find("--")
    close = masked.rfind("-->")
    reversible = start > 0 and masked[start - 1] == "<"
    if start < 0 or close < 0:
        raise _mistyped(line)
    inside_start = start + 2
    if reversible:
        start -= 1
    elif start == close and (single := re.search(r"(?:<|(?<=\s))-\s*[^-\s][^-]*$", masked[:start])):
        form = BOTH_WAYS if single.group().startswith("<") else ONE_WAY
        raise refuse("the arrow begins with a single '-'", number, single.start() + 1, form)
    if close < inside_start:
        if reversible:
            raise refuse("the arrow has no constants", number, start + 1, BOTH_WAYS)
        raise refuse(
            "the arrow has no constant", number, start + 1, f"{ONE_WAY}, with the constant's name for k"
        )
    inside = masked[inside_start:close]
    if (extra := inside.find("-->")) >= 0:
        second = max(masked.rfind("--", 0, close), inside_start + extra)
        raise refuse("a second arrow in one line", number, second + 1, "one step a line")
    return Extent(start, inside_start, close, close + 3, reversible)


def read_arrow(line: Line, extent: Extent) -> Arrow:
    """Constants or law over an arrow; InvalidInput for what cannot stand there."""
    inside = line.text[extent.inside_start : extent.inside_end]
    shift = len(inside) - len(inside.lstrip())
    inside = inside.strip()
    column = extent.inside_start + shift + 1
    if "{" in inside or "}" in inside:
        law = _law(line, inside, column, reversible=extent.reversible)
        return Arrow(extent.start, extent.end, (), law, column)
    if not inside.strip("- "):
        form = BOTH_WAYS if extent.reversible else f"{ONE_WAY}, with the constant's name for k"
        raise refuse("the arrow has no constant", line.number, extent.start + 1, form)
    if not extent.reversible:
        return Arrow(extent.start, extent.end, (_constant(inside, line.number, column),), None)
    return Arrow(extent.start, extent.end, _two_constants(inside, line.number, column), None)


def _law(line: Line, inside: str, column: int, *, reversible: bool) -> Parsed:
    number = line.number
    if reversible:
        raise refuse(
            "a written-out law over a reversible arrow",
            number,
            column,
            "the net rate as one law over --{ ... }-->, or two steps with a law each",
        )
    if not inside.startswith("{"):
        raise refuse("the law does not begin with '{'", number, column, "--{ ... }-->")
    if not inside.endswith("}"):
        if (brace := line.masked.find("}", column - 1, column - 1 + len(inside))) >= 0:
            raise refuse(
                "there is something between '}' and the arrow's end", number, brace + 2, "--{ ... }-->"
            )
        raise refuse("the law is not closed", number, column, "a } before -->, as in --{ ... }-->")
    return parse_with_places(inside[1:-1], number, column + 1)


def _two_constants(inside: str, number: int, column: int) -> tuple[Place, Place]:
    parts = inside.split("/")
    if len(parts) == 1:
        if other := re.search(r"[,;|\\]", inside):
            raise refuse(
                f"'{other.group()}' between the constants",
                number,
                column + other.start(),
                f"a slash: {BOTH_WAYS}",
            )
        raise refuse(
            "a reversible step with one constant",
            number,
            column,
            f"{BOTH_WAYS} (forward / backward), or {ONE_WAY} for an irreversible step",
        )
    if len(parts) > 2:
        raise refuse("more than two constants over one arrow", number, column, BOTH_WAYS)
    places: list[Place] = []
    at = column
    for part, which in zip(parts, ("forward", "backward"), strict=True):
        name = part.strip()
        where = at + len(part) - len(part.lstrip())
        if not name:
            raise refuse(f"the {which} constant is missing", number, where, BOTH_WAYS)
        places.append(_constant(name, number, where))
        at += len(part) + 1
    return places[0], places[1]


def _constant(name: str, number: int, column: int) -> Place:
    """A rate constant by name."""
    if is_parameter_name(name):
        return Place(check_parameter(name, number, column), column)
    if NUMBER.fullmatch(name):
        raise refuse(
            f"a number, {name}, over the arrow",
            number,
            column,
            "a name such as k_1, whose value is given on use; or a law, --{ 0.1*[A] }-->",
        )
    if re.fullmatch(r"\w+(?:\s+\w+)+", name):
        raise refuse(f"'{name}' is not one name", number, column, "_".join(name.split()))
    raise refuse(
        f"'{name}' is not the name of a constant",
        number,
        column,
        "letters, digits and _ over the arrow; an expression as `where k = ...`, a rate law in { }",
    )


def check_parameter(name: str, number: int, column: int) -> str:
    """Name of a parameter in NFC; InvalidInput when it is reserved or too long."""
    name = normal_name(name)
    if name in RESERVED:
        raise refuse(
            f"'{name}' is reserved: it stands for {RESERVED[name]}", number, column, f"{name}_1, say"
        )
    if name in FUNCTION_NAMES:
        raise refuse(f"'{name}' is reserved: it is a function", number, column, f"{name}_1, say")
    if len(name) > MAX_NAME_LENGTH:
        raise refuse(
            f"a name of {len(name)} characters",
            number,
            column,
            f"a name of at most {MAX_NAME_LENGTH} characters",
        )
    return name


def _mistyped(line: Line) -> InvalidInput:
    """The line looks like a step, but has no arrow of the notation."""
    found = ARROW_LIKE.search(line.masked)
    column = found.start() + 1 if found else 1
    shown = found.group() if found else ""
    two_headed = "<" in shown or shown in "⇌⇄⇆↔⇋" or "<" in line.masked
    form = BOTH_WAYS if two_headed else ONE_WAY
    if shown == "--" or shown.startswith("<--"):
        if (single := re.search(r"(?<!-)->", line.masked)) is not None:
            return refuse("the arrow ends in '->'", line.number, single.start() + 1, f"'-->', as in {form}")
        if (head := line.masked.find("--", column + len(shown) - 1)) >= 0:
            return refuse("the arrow has no head", line.number, head + 1, f"'-->', as in {form}")
        if line.masked.startswith("{", column + len(shown) - 1):
            return refuse(
                "the law over the arrow is not closed", line.number, column, "--{ ... }-->, on one line"
            )
        return refuse("the arrow is not closed", line.number, column, form)
    return refuse(f"'{shown}' is not an arrow of the notation", line.number, column, form)
