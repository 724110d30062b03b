"""One line of a mechanism, read: a step, `observe`, `hold` or `where`, with the places of its names."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import TypeVar

from kinetics_db.engine.network.arrows import check_parameter, find_arrow, has_arrow, read_arrow
from kinetics_db.engine.network.grammar import Parsed, Place, parse_with_places
from kinetics_db.engine.network.linear import linear_terms
from kinetics_db.engine.network.lines import Line
from kinetics_db.engine.network.model import Computed, Observable, Step
from kinetics_db.engine.network.sides import read_side, split_names
from kinetics_db.engine.network.tokens import (
    is_parameter_name,
    normal_name,
    read_species,
    refuse,
    skip_spaces,
)
from kinetics_db.errors import InvalidInput, Problem

_Read = TypeVar("_Read")
LONGEST_OBSERVE = 5_000  # terms; a sum over every species of a large mechanism
KEYWORDS = ("observe", "hold", "where", "keep", "label", "isotope")
WORD = re.compile(r"\s*([^\W\d_]+)(?=[\s:]|$)")
NAME_LIKE = re.compile(r'"([^"]*)"|([^\W\d_][\w*\'.]*)')
NOT_YET = {
    "keep": (
        "species held at equilibrium",
        "a fast reversible step, as in Cat + P <--k_f / k_b--> CatP with where k_b = k_f/K_cp",
    ),
    "label": ("isotopic labels", "a species of its own for each isotopologue, with its own steps"),
    "isotope": ("isotope effects", "a constant of its own for the heavy form, as in where k_D = k_H/kie"),
}
STATEMENTS = "a step such as A + B --k--> C, or observe, hold or where"


@dataclass(frozen=True)
class PlacedStep:
    """A step with the column of its first character, of its constants and of the names in its law."""

    step: Step
    column: int
    constants: tuple[Place, ...]
    law: Parsed | None
    law_column: int
    species: tuple[Place, ...]


@dataclass(frozen=True)
class PlacedObservable:
    observable: Observable
    column: int
    species: tuple[Place, ...]


@dataclass(frozen=True)
class PlacedHold:
    line: int
    species: tuple[Place, ...]


@dataclass(frozen=True)
class PlacedComputed:
    computed: Computed
    column: int
    parameters: tuple[Place, ...]


@dataclass
class Statements:
    """All statements of a text that could be read, and the problems found in the others."""

    steps: list[PlacedStep] = field(default_factory=list)
    observables: list[PlacedObservable] = field(default_factory=list)
    holds: list[PlacedHold] = field(default_factory=list)
    computed: list[PlacedComputed] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    unread: list[str] = field(default_factory=list)  # lines that a problem kept from being read

    def unread_names(self, *, of_steps: bool = False) -> frozenset[str]:
        """Names that the lines that could not be read, or the steps among them, may have declared or used."""
        lines = (text for text in self.unread if not of_steps or has_arrow(text))
        return frozenset(
            normal_name(inside or bare) for text in lines for inside, bare in NAME_LIKE.findall(text)
        )


def read_statement(line: Line, into: Statements) -> None:
    """Read one line; what is wrong with it joins the problems."""
    before = len(into.problems)
    try:
        _dispatch(line, into)
    except InvalidInput as error:
        into.problems.extend(error.problems)
    if len(into.problems) > before:
        into.unread.append(line.text)


def _dispatch(line: Line, into: Statements) -> None:
    word = WORD.match(line.masked)
    keyword = word.group(1) if word else ""
    equals = line.masked.find("=")
    arrow = has_arrow(line.masked)
    if word and keyword in ("observe", "where") and "=" in line.masked[: _first_arrow(line.masked)]:
        arrow = False  # a minus in the expression
    if arrow:
        _step(line, into)
    elif word and keyword in KEYWORDS:
        _keyword(line, keyword, word.end(), into)
    else:
        raise _not_a_statement(line, keyword, word.start(1) if word else -1, equals)


def _first_arrow(masked: str) -> int:
    found = re.search(r"<-|--|=>|->", masked)
    return found.start() if found else len(masked)


def _step(line: Line, into: Statements) -> None:
    """Both sides and the arrow are read even when one of them is wrong, so that all problems are told."""
    extent = find_arrow(line)
    left = _collected(lambda: read_side(line.text[: extent.start], line.number, 1, which="before"), into)
    arrow = _collected(lambda: read_arrow(line, extent), into)
    right = _collected(
        lambda: read_side(line.text[extent.end :], line.number, extent.end + 1, which="after"), into
    )
    if left is None or arrow is None or right is None:
        return
    column = skip_spaces(line.text, 0) + 1
    if not left.side and not right.side:
        raise refuse("nothing becomes nothing", line.number, column, "a species on one side at least")
    names = [place.name for place in arrow.constants]
    step = Step(
        reactants=left.side,
        products=right.side,
        constant=names[0] if names else None,
        reverse_constant=names[1] if len(names) > 1 else None,
        law=arrow.law.expression if arrow.law else None,
        line=line.number,
    )
    into.steps.append(
        PlacedStep(step, column, arrow.constants, arrow.law, arrow.law_column, left.places + right.places)
    )


def _keyword(line: Line, keyword: str, after: int, into: Statements) -> None:
    if keyword in NOT_YET:
        what, cure = NOT_YET[keyword]
        column = line.text.index(keyword) + 1
        raise refuse(f"'{keyword}': this version cannot use {what} yet", line.number, column, cure)
    if keyword == "hold":
        if (equals := line.masked.find("=")) >= 0:
            raise refuse(
                "'=' in hold", line.number, equals + 1, "hold A; the concentration is what is charged"
            )
        begin = after
        if line.text[after : after + 1] == ":":
            raise refuse("':' after hold", line.number, after + 1, "hold A, B")
        into.holds.append(PlacedHold(line.number, split_names(line.text[begin:], line.number, begin + 1)))
    elif keyword == "observe":
        _observe(line, after, into)
    else:
        _where(line, after, into)


def _observe(line: Line, after: int, into: Statements) -> None:
    form = "observe dimer = [Cat] + 2*[Cat2]"
    begin = skip_spaces(line.text, after)
    name, end = read_species(line.text, begin, line.number, 1)
    equals = skip_spaces(line.text, end)
    if not name:
        raise refuse("the observable has no name", line.number, begin + 1, form)
    if line.text[equals : equals + 1] != "=":
        if "=" in line.masked[equals:]:
            raise refuse(
                "the name of the observable is not a plain name", line.number, begin + 1, f"quotes; {form}"
            )
        raise refuse(f"what '{name}' consists of is missing", line.number, equals + 1, form)
    parsed = parse_with_places(
        line.text[equals + 1 :], line.number, equals + 2, longest_chain=LONGEST_OBSERVE
    )
    if parsed.parameters:
        place = parsed.parameters[0]
        raise refuse(
            f"'{place.name}' in an observable",
            line.number,
            place.column,
            f"numbers as weights, and species in brackets, as in {form}",
        )
    column = skip_spaces(line.text, equals + 1) + 1
    terms = linear_terms(parsed.expression, line.number, column)
    into.observables.append(PlacedObservable(Observable(name, terms, line.number), begin + 1, parsed.species))


def _where(line: Line, after: int, into: Statements) -> None:
    form = "where k_b = k_f/K_1"
    begin = skip_spaces(line.text, after)
    sign = re.search(r"[=:]", line.masked[begin:])
    if not sign:
        raise refuse("there is no '=' after where", line.number, begin + 1, form)
    at = begin + sign.start()
    name = line.text[begin:at].strip()
    if not is_parameter_name(name):
        what = f"'{name}' is not the name of a constant" if name else "the name of the constant is missing"
        raise refuse(what, line.number, begin + 1, f"letters, digits and _, as in {form}")
    name = check_parameter(name, line.number, begin + 1)
    if line.masked.startswith(":=", at):
        raise refuse("':=' is not used here", line.number, at + 1, f"=, as in {form}")
    if sign.group() == ":":
        raise refuse(
            "':': this version cannot use eyring(...) and arrhenius(...) yet",
            line.number,
            at + 1,
            f"the expression written out with T: where {name} = A*exp(-Ea/(8.314462618*T)), Ea in J/mol",
        )
    parsed = parse_with_places(line.text[at + 1 :], line.number, at + 2)
    if parsed.species:
        place = parsed.species[0]
        raise refuse(
            f"the concentration [{place.name}] in a computed constant",
            line.number,
            place.column,
            "constants and T only; what depends on concentrations stands in a law, --{ ... }-->",
        )
    into.computed.append(
        PlacedComputed(Computed(name, parsed.expression, line.number), begin + 1, parsed.parameters)
    )


def _not_a_statement(line: Line, word: str, at: int, equals: int) -> InvalidInput:
    number, first = line.number, skip_spaces(line.text, 0) + 1
    if word.lower() in KEYWORDS:
        return refuse(f"'{word}' has to be written in lower case", number, at + 1, word.lower())
    if close := get_close_matches(word.lower(), KEYWORDS, 1, 0.75):
        return refuse(f"'{word}' is not a statement", number, at + 1, f"did you mean {close[0]}?")
    if equals >= 0:
        name = line.text[:equals].strip()
        if name.startswith("["):
            cure = f"observe name = {line.text[equals + 1 :].strip() or '[A]'}, or an arrow for a step"
        else:
            cure = (
                f"where {name or 'k'} = ... for a computed constant, observe {name or 'x'} = ... for a signal"
            )
        return refuse("'=' in a line that is no statement", number, equals + 1, cure)
    return refuse("this line is no statement: it has no arrow", number, first, STATEMENTS)


def _collected(read: Callable[[], _Read], into: Statements) -> _Read | None:
    """What was read, or None with its problems kept."""
    try:
        return read()
    except InvalidInput as error:
        into.problems.extend(error.problems)
        return None
