"""Checks of a whole mechanism, over all of its statements. Errors stop, warnings inform."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from difflib import get_close_matches
from graphlib import CycleError

from kinetics_db.engine.network.derived import computed_in_order, net_numbers, orders_of_constants
from kinetics_db.engine.network.grammar import Place
from kinetics_db.engine.network.laws import LawTrials
from kinetics_db.engine.network.lines import MAX_STEPS
from kinetics_db.engine.network.model import Step
from kinetics_db.engine.network.statements import Statements
from kinetics_db.engine.network.syntax import parameters_of
from kinetics_db.engine.network.tokens import quoted
from kinetics_db.errors import Problem

MOST_SUGGESTIONS = 20  # each is a search through all names


def check(statements: Statements) -> list[Problem]:
    """Everything wrong or worth saying about the statements together."""
    found: list[Problem] = []
    for one in CHECKS:
        found.extend(one(statements))
    if not any(problem.severity == "error" for problem in (*found, *statements.problems)):
        found.extend(_laws_vanish(statements))
    return found


def _warning(message: str, line: int, column: int, cure: str) -> Problem:
    return Problem(message, line=line, column=column, cure=cure, severity="warning")


def _held(statements: Statements) -> frozenset[str]:
    return frozenset(place.name for hold in statements.holds for place in hold.species)


def _has_steps(statements: Statements) -> Iterator[Problem]:
    if not statements.steps and not statements.unread and not statements.problems:
        yield Problem(
            "the mechanism has no step", line=1, column=1, cure="one step at least, as in A --k--> B"
        )
    if len(statements.steps) > MAX_STEPS:
        first = statements.steps[MAX_STEPS]
        yield Problem(
            f"a mechanism of {len(statements.steps)} steps",
            line=first.step.line,
            column=first.column,
            cure=f"at most {MAX_STEPS} steps",
        )


def _species_are_known(statements: Statements) -> Iterator[Problem]:
    """A species may stand in a law, `observe` or `hold` only when a step names it."""
    known = list(dict.fromkeys(place.name for placed in statements.steps for place in placed.species))
    known_set = set(known)
    uses: list[tuple[int, Place, str]] = []
    for placed in statements.steps:
        if placed.law is not None:
            uses += [
                (
                    placed.step.line,
                    place,
                    "or on both sides of the step, if it takes part without being used up",
                )
                for place in placed.law.species
            ]
    uses += [(o.observable.line, place, "") for o in statements.observables for place in o.species]
    uses += [(hold.line, place, "") for hold in statements.holds for place in hold.species]
    unread = statements.unread_names(of_steps=True)  # one of them may be the step that names it
    nearest: dict[str, str] = {}
    for line, place, also in uses:
        if place.name in known_set or place.name in unread:
            continue
        if place.name not in nearest and len(nearest) < MOST_SUGGESTIONS:
            nearest[place.name] = _nearest(place.name, known)
        cure = nearest.get(place.name) or "a species of a step"
        yield Problem(
            f"species '{place.name}' stands in no step",
            line=line,
            column=place.column,
            cure=", ".join(filter(None, (cure, also))),
        )


def _nearest(name: str, known: list[str]) -> str:
    """What a mistyped name may have meant; empty when nothing comes close."""
    near = get_close_matches(name, known, 3, 0.6) or [
        one for one in known if one.casefold() == name.casefold()
    ]
    return f"did you mean {' or '.join(quoted(one) for one in near)}?" if near else ""


def _observables_have_names_of_their_own(statements: Statements) -> Iterator[Problem]:
    species = {place.name for placed in statements.steps for place in placed.species}
    seen: dict[str, int] = {}
    for placed in statements.observables:
        name, line = placed.observable.name, placed.observable.line
        if name in species:
            yield Problem(
                f"the observable '{name}' has the name of a species",
                line=line,
                column=placed.column,
                cure="another name for the observable; a species can be observed by its own name anyway",
            )
        if name in seen:
            yield Problem(
                f"the observable '{name}' was declared on line {seen[name]} already",
                line=line,
                column=placed.column,
                cure="one declaration, or another name",
            )
        seen.setdefault(name, line)


def _held_once(statements: Statements) -> Iterator[Problem]:
    seen: dict[str, int] = {}
    for hold in statements.holds:
        for place in hold.species:
            if place.name in seen:
                yield _warning(
                    f"'{place.name}' is held already on line {seen[place.name]}",
                    hold.line,
                    place.column,
                    "one hold for each species",
                )
            seen.setdefault(place.name, hold.line)


def _computed_once_and_without_a_circle(statements: Statements) -> Iterator[Problem]:
    seen: dict[str, int] = {}
    for placed in statements.computed:
        name, line = placed.computed.name, placed.computed.line
        if name in seen:
            yield Problem(
                f"'{name}' was computed on line {seen[name]} already",
                line=line,
                column=placed.column,
                cure="one `where` for each constant",
            )
        seen.setdefault(name, line)
    try:
        computed_in_order(placed.computed for placed in statements.computed)
    except CycleError as error:
        circle = list(reversed(error.args[1]))
        last = max(
            (p for p in statements.computed if p.computed.name in circle),
            key=lambda placed: placed.computed.line,
        )
        shown = circle if len(circle) <= 8 else [*circle[:4], "...", *circle[-3:]]
        yield Problem(
            f"computed constants depend on each other in a circle: {' -> '.join(shown)}",
            line=last.computed.line,
            column=last.column,
            cure="one of them given or fitted instead of computed",
        )


def _one_order_for_each_constant(statements: Statements) -> Iterator[Problem]:
    first: dict[str, tuple[float, int]] = {}
    for placed in statements.steps:
        for place, one_way in zip(placed.constants, _one_way(placed.step), strict=True):
            order = orders_of_constants([one_way])[place.name][0]
            known, line = first.setdefault(place.name, (order, placed.step.line))
            if known != order:
                yield Problem(
                    f"'{place.name}' is a constant of order {order:g} here and of order {known:g}"
                    f" on line {line}, so that it would have two units",
                    line=placed.step.line,
                    column=place.column,
                    cure="a constant of its own for each order",
                )


def _one_way(step: Step) -> tuple[Step, ...]:
    """A mass-action step as one irreversible step for each of its constants."""
    forward = Step(step.reactants, step.products, step.constant)
    if step.reverse_constant is None:
        return (forward,) if step.constant is not None else ()
    return forward, Step(step.products, step.reactants, step.reverse_constant)


def _steps_do_something(statements: Statements) -> Iterator[Problem]:
    held = _held(statements)
    seen: dict[object, int] = {}
    for placed in statements.steps:
        step = placed.step
        if not any(number for number in net_numbers(step).values()):
            yield _warning(
                "this step changes nothing: both sides are the same",
                step.line,
                placed.column,
                "other products",
            )
        elif not any(number for name, number in net_numbers(step).items() if name not in held):
            yield _warning("this step changes held species only", step.line, placed.column, "one hold less")
        same = (frozenset(step.reactants), frozenset(step.products), *_over(step))
        if same in seen:
            yield _warning(
                f"this step stands on line {seen[same]} already; its rate counts twice",
                step.line,
                placed.column,
                "one of the two, or a constant of its own for each",
            )
        seen.setdefault(same, step.line)


def _over(step: Step) -> tuple[object, ...]:
    return step.constant, step.reverse_constant, step.law


def _every_computed_constant_is_used(statements: Statements) -> Iterator[Problem]:
    if not statements.steps:
        return
    used = {place.name for placed in statements.steps for place in placed.constants}
    for placed in statements.steps:
        if placed.law is not None:
            used.update(place.name for place in placed.law.parameters)
    for other in statements.computed:
        used.update(name for name in parameters_of(other.computed.expression) if name != other.computed.name)
    unread = statements.unread_names()
    for one in statements.computed:
        name = one.computed.name
        if name not in used and name not in unread:
            yield _warning(
                f"'{name}' is computed but used in no step",
                one.computed.line,
                one.column,
                "its name over an arrow or in a law, or no `where`",
            )


def _parameters_are_no_species(statements: Statements) -> Iterator[Problem]:
    species = {place.name for placed in statements.steps for place in placed.species}
    for placed in statements.steps:
        if placed.law is None:
            continue
        told: set[str] = set()
        for place in placed.law.parameters:
            if place.name in species and place.name not in told:
                told.add(place.name)
                yield _warning(
                    f"'{place.name}' without brackets is a constant, though a species has that name",
                    placed.step.line,
                    place.column,
                    f"[{place.name}] for the concentration, or another name for the constant",
                )


def _laws_vanish(statements: Statements) -> Iterator[Problem]:
    """Needs a mechanism without errors, since the laws are evaluated."""
    laws = [placed.law.expression for placed in statements.steps if placed.law is not None]
    if not laws:
        return
    trials = LawTrials(laws, [placed.computed for placed in statements.computed])
    held = _held(statements)
    for placed in statements.steps:
        yield from trials.problems(placed.step, placed.law_column, held)


CHECKS: tuple[Callable[[Statements], Iterable[Problem]], ...] = (
    _has_steps,
    _species_are_known,
    _observables_have_names_of_their_own,
    _held_once,
    _computed_once_and_without_a_circle,
    _one_order_for_each_constant,
    _steps_do_something,
    _every_computed_constant_is_used,
    _parameters_are_no_species,
)
