"""A mechanism's text as it is understood: what is wrong with which sign of it, or what it says."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from kinetics_db.engine.network import Network, constant_units, must_be_charged, parse_mechanism, write
from kinetics_db.engine.shown_numbers import PAGE
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.web.names import name_html

if TYPE_CHECKING:
    from django.utils.safestring import SafeString

MOST_PROBLEMS = 50
WINDOW = 40
"""A quoted line is cut to so many characters on both sides of the place."""


@dataclass(frozen=True)
class ProblemSheet:
    """One problem with the line it stands in: the text before the place, the character there, the text after."""

    message: str
    cure: str
    is_warning: bool
    line: int | None
    column: int | None
    before: str = ""
    at: str = ""
    after: str = ""


@dataclass(frozen=True)
class ConstantLine:
    """A constant of a network with its unit; ``computed`` is the expression of one that is not fitted."""

    name: SafeString
    unit: str
    computed: bool


@dataclass(frozen=True)
class NetworkSheet:
    """A network in its own words."""

    steps: str
    species: Sequence[str]
    charged: Sequence[str]
    """species that nothing forms, so that they have to be put in"""
    held: Sequence[str]
    constants: Sequence[ConstantLine]
    observables: Sequence[str]

    @property
    def has_unknown_units(self) -> bool:
        """Whether a constant stands in a law only, from which no unit follows."""
        return any(not constant.unit for constant in self.constants)


@dataclass(frozen=True)
class Checked:
    """What the checks found in a text; ``network`` is None while it cannot be used, ``blank`` before it begins."""

    problems: Sequence[ProblemSheet] = ()
    further: int = 0
    network: NetworkSheet | None = None
    blank: bool = False

    @property
    def errors(self) -> list[ProblemSheet]:
        """Problems that keep the text from being used."""
        return [problem for problem in self.problems if not problem.is_warning]

    @property
    def warnings(self) -> list[ProblemSheet]:
        """What to look at before it is used."""
        return [problem for problem in self.problems if problem.is_warning]


def checked(text: str) -> Checked:
    """A text as the parser takes it."""
    if not text.strip():
        return Checked(blank=True)
    try:
        network = parse_mechanism(text)
    except InvalidInput as error:
        return _with_problems(error.problems, text, None)
    return _with_problems(network.warnings, text, network_sheet(network))


def network_sheet(network: Network) -> NetworkSheet:
    """Steps, species, constants with their units in mol/L and s, observables."""
    units = constant_units(network, concentration="mol/L", time="s")
    computed = {one.name for one in network.computed}
    return NetworkSheet(
        steps=write(network),
        species=network.species,
        charged=must_be_charged(network),
        held=network.held,
        constants=[
            ConstantLine(name_html(name), PAGE.unit(unit), name in computed) for name, unit in units.items()
        ],
        observables=[one.name for one in network.observables],
    )


def _with_problems(problems: Sequence[Problem], text: str, network: NetworkSheet | None) -> Checked:
    lines = text.removeprefix("\ufeff").replace("\r\n", "\n").replace("\r", "\n").split("\n")
    # Errors first: a long list of warnings must not hide what stops.
    ordered = sorted(problems, key=lambda problem: problem.severity == "warning")
    shown = [_sheet(problem, lines) for problem in ordered[:MOST_PROBLEMS]]
    return Checked(shown, max(0, len(problems) - MOST_PROBLEMS), network)


def _sheet(problem: Problem, lines: Sequence[str]) -> ProblemSheet:
    before = at = after = ""
    if problem.line is not None and 1 <= problem.line <= len(lines):
        line, column = lines[problem.line - 1], max(problem.column or 1, 1) - 1
        first, last = max(0, column - WINDOW), column + 1 + WINDOW
        before = ("…" if first else "") + _visible(line[first:column])
        at = _visible(line[column : column + 1]) or " "
        after = _visible(line[column + 1 : last]) + ("…" if last < len(line) else "")
    return ProblemSheet(
        message=problem.message,
        cure=problem.cure,
        is_warning=problem.severity == "warning",
        line=problem.line,
        column=problem.column,
        before=before,
        at=at,
        after=after,
    )


def _visible(text: str) -> str:
    """Signs that no page shows, as a box; a tab as a blank, since it counts as one column."""
    return "".join(c if c.isprintable() else " " if c == "\t" else "\N{REPLACEMENT CHARACTER}" for c in text)
