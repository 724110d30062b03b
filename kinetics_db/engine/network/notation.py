"""Reading a mechanism: from its text to a checked `Network`."""

from __future__ import annotations

from kinetics_db.engine.network.checks import check
from kinetics_db.engine.network.lines import split_lines
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.network.statements import Statements, read_statement
from kinetics_db.engine.network.syntax import parameters_of
from kinetics_db.errors import InvalidInput, Problem


def parse_mechanism(text: str) -> Network:
    """Network written in the notation.

    Parameters
    ----------
    text : str
        One statement a line; at most 100 kB and 2,000 steps.

    Returns
    -------
    Network
        Species in order of first appearance in the steps; constants in order of first appearance in the
        steps, then in the computed constants. Warnings of the checks stand in ``warnings``.

    Raises
    ------
    InvalidInput
        Holds every problem found, each with line, column and what would mend it, in the order of the text;
        warnings too.
    """
    split = split_lines(text)
    statements = Statements(problems=split.problems, unread=split.refused)
    for line in split.lines:
        read_statement(line, statements)
    found = sorted([*statements.problems, *check(statements)], key=_place)
    if any(problem.severity == "error" for problem in found):
        raise InvalidInput(found)
    return _network(statements, text, tuple(found))


def _place(problem: Problem) -> tuple[int, int]:
    return problem.line or 0, problem.column or 0


def _network(statements: Statements, text: str, warnings: tuple[Problem, ...]) -> Network:
    steps = tuple(placed.step for placed in statements.steps)
    computed = tuple(placed.computed for placed in statements.computed)
    constants: dict[str, None] = {}
    for step in steps:
        names = (step.constant, step.reverse_constant)
        constants |= dict.fromkeys(name for name in names if name is not None)
        if step.law is not None:
            constants |= dict.fromkeys(parameters_of(step.law))
    for one in computed:
        constants |= dict.fromkeys(parameters_of(one.expression))
    for one in computed:
        constants.pop(one.name, None)
    return Network(
        species=tuple(dict.fromkeys(place.name for placed in statements.steps for place in placed.species)),
        steps=steps,
        held=tuple(dict.fromkeys(place.name for hold in statements.holds for place in hold.species)),
        observables=tuple(placed.observable for placed in statements.observables),
        computed=computed,
        constants=tuple(constants),
        text=text,
        warnings=warnings,
    )
