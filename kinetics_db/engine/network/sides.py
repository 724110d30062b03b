"""One side of a step: species with stoichiometric numbers, joined by + between spaces."""

from __future__ import annotations

import math
import re
from typing import NamedTuple

from kinetics_db.engine.network.grammar import Place
from kinetics_db.engine.network.model import Side
from kinetics_db.engine.network.tokens import MEANT, end_of_species, quoted, read_species, refuse, skip_spaces
from kinetics_db.errors import InvalidInput

COEFFICIENT = re.compile(r"(?P<top>[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:/(?P<bottom>[0-9]+(?:\.[0-9]+)?))?")
LARGEST = 1_000_000  # of a stoichiometric number
WORD = re.compile(r"\S+")
PHOTON = ("hv", "hν")


class ReadSide(NamedTuple):
    """A side, with repeated species added up, and the place of each species' first mention."""

    side: Side
    places: tuple[Place, ...]


def read_side(text: str, line: int, column: int, *, which: str) -> ReadSide:
    """One side of a step.

    Parameters
    ----------
    text : str
        What stands before or after the arrow.
    line, column : int
        Where ``text`` begins.
    which : str
        'before' or 'after', for messages.

    Raises
    ------
    InvalidInput
        With the place of the first thing that cannot be read.
    """
    at = skip_spaces(text, 0)
    if at == len(text):
        raise refuse(f"there is no species {which} the arrow", line, column + at, "a species, or `nothing`")
    numbers: dict[str, float] = {}
    places: list[Place] = []
    while True:
        begin = at
        factor, at = _coefficient(text, at, line, column)
        name_at = at
        name, at = _species(text, at, line, column)
        if name == "nothing":
            if begin != name_at or places or skip_spaces(text, at) < len(text):
                raise refuse(
                    "'nothing' stands alone on its side", line, column + name_at, "the species without it"
                )
            return ReadSide((), ())
        if name not in numbers:
            places.append(Place(name, column + name_at))
        numbers[name] = numbers.get(name, 0.0) + factor
        after = skip_spaces(text, at)
        if after == len(text):
            return ReadSide(tuple(numbers.items()), tuple(places))
        at = _after_plus(text, at, after, line, column)


def _coefficient(text: str, at: int, line: int, column: int) -> tuple[float, int]:
    """Stoichiometric number (1 where none is written) and the index of the name after it."""
    found = COEFFICIENT.match(text, at)
    if not found:
        return 1.0, at
    bottom = float(found["bottom"] or 1)
    value = float(found["top"]) / bottom if bottom else math.inf
    if not 0 < value <= LARGEST:
        raise refuse(
            f"{found.group()} as a stoichiometric number",
            line,
            column + at,
            f"a positive number up to {LARGEST:,}, as in 2 A",
        )
    after = found.end()
    begin = skip_spaces(text, after)
    rest = text[after : after + 1]
    if begin == len(text):
        raise refuse("a species is missing after the number", line, column + begin, f"{found.group()} A, say")
    if rest == ",":
        raise refuse("a comma in a number", line, column + after, "a decimal point, as in 0.5 A")
    if text[begin] in "*·×":
        raise refuse(f"'{text[begin]}' after the number", line, column + begin, f"a space: {found.group()} A")
    if begin == after and rest != '"':
        cured = f"a space after the number: {found.group()} {text[after:].split(' ', 1)[0]}"
        raise refuse("the number and the name stand together", line, column + at, cured)
    return value, begin


def _species(text: str, at: int, line: int, column: int) -> tuple[str, int]:
    end = end_of_species(text, at)
    bare = text[at:end]
    if bare in PHOTON:
        raise refuse(
            "a photon: this version cannot use light-driven steps yet",
            line,
            column + at,
            "a written-out law for the rate under your lamp, as in A --{ r_light*[A] }--> B",
        )
    if bare == "nothing":
        return bare, end
    chunk = _chunk(text, at)
    if chunk.startswith("+"):
        raise refuse("'+' has no species before it", line, column + at, "a species on each side of +")
    name, end = read_species(text, at, line, column)
    following = text[end : end + 1]
    if name and following == "@":
        raise refuse(
            "'@': this version cannot use isotopic labels yet",
            line,
            column + end,
            "a species of its own for each form",
        )
    if name and (not following or following.isspace() or following == "+"):
        return name, end
    if chunk[0] in MEANT and MEANT[chunk[0]] == '"':
        raise refuse(
            f"'{chunk[0]}' is not a quote of the notation", line, column + at, 'plain quotes: "name"'
        )
    if chunk.startswith("["):
        raise refuse(
            "brackets around a species of a step", line, column + at, "the name alone, as in A --k--> B"
        )
    if name and following in ",;&":
        raise refuse(
            f"'{following}' after '{name}'", line, column + end, f"a + between spaces: {quoted(name)} + B"
        )
    bare = chunk.replace('"', "")
    raise refuse(
        f"'{bare}' is not a plain species name", line, column + at, f'quotes around the name: "{bare}"'
    )


def _chunk(text: str, at: int) -> str:
    """What stands from ``at`` to the next space."""
    found = WORD.match(text, at)
    return found.group() if found else " "


def _after_plus(text: str, end: int, at: int, line: int, column: int) -> int:
    """Index of the next term, past the + at ``at``; ``end`` is where the term before it ended."""
    if text[at] != "+":
        raise refuse(
            f"there is no + before '{_chunk(text, at)}'", line, column + at, "a + between spaces, as in A + B"
        )
    begin = skip_spaces(text, at + 1)
    if begin == len(text) and at > end:
        raise refuse("a species is missing after +", line, column + at, "a species, as in A + B")
    if at == end or begin == at + 1:
        raise _crowded_plus(text, end, at, line, column)
    return begin


def _crowded_plus(text: str, end: int, at: int, line: int, column: int) -> InvalidInput:
    """The + at ``at`` touches a name: a missing space, or a + that belongs to the name."""
    before = text[:end].split()[-1]
    begin = skip_spaces(text, at + 1)
    if at == end and begin > at + 1:
        return refuse(
            f"'+' stands right after '{before}'",
            line,
            column + at,
            f'a space before it, or quotes: "{before}+"',
        )
    after = _chunk(text, begin).strip().lstrip("+") or "B"
    return refuse("'+' without a space on each side", line, column + at, f"{before} + {after}")


def split_names(text: str, line: int, column: int) -> tuple[Place, ...]:
    """Species of a comma-separated list, with their places; InvalidInput for an empty or malformed one."""
    places: list[Place] = []
    at = 0
    while True:
        at = skip_spaces(text, at)
        if at == len(text) or text[at] == ",":
            raise refuse("a species name is missing", line, column + at, "names with commas between: A, B")
        if text[at] == "[":
            raise refuse("brackets around a species name", line, column + at, "the name alone, as in hold A")
        name, end = _species_in_list(text, at, line, column)
        places.append(Place(name, column + at))
        at = skip_spaces(text, end)
        if at == len(text):
            return tuple(places)
        if text[at] != ",":
            raise refuse(f"'{text[at]}' between the names", line, column + at, "a comma: A, B")
        at += 1


def _species_in_list(text: str, at: int, line: int, column: int) -> tuple[str, int]:
    name, end = read_species(text, at, line, column)
    following = text[end : end + 1]
    if name and (not following or following.isspace() or following == ","):
        return name, end
    bare = re.split(r"[,\s]", text[at:], maxsplit=1)[0].replace('"', "")
    raise refuse(
        f"'{bare}' is not a plain species name", line, column + at, f'quotes around the name: "{bare}"'
    )
