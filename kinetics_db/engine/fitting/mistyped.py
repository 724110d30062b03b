"""What in a fit's request is of a kind that nothing can be computed with, each with its place."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from reprlib import repr as shortened

from kinetics_db.engine.fitting.problem import Constant, Nuisance, Prior, Settings, StartConcentration
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput, Problem

LARGEST_WHOLE = 2**63 - 1  # beyond, a number may not even be shown
Rule = Callable[[object, str], Iterator[Problem]]


def mistyped(
    entry: Constant | StartConcentration | Prior | Nuisance | Settings, where: str
) -> Iterator[Problem]:
    """Problems with the types of one entry's values; fields are named `where.attribute`.

    Sizes are left to the checks that follow: what passes here can be compared and computed with.
    """
    for attribute, rule in RULES[type(entry)].items():
        yield from rule(getattr(entry, attribute), f"{where}.{attribute}" if where else attribute)


def text(value: object, field: str) -> Iterator[Problem]:
    """A name: not empty, no control characters."""
    try:
        plain_text(value, field=field, required=True)
    except InvalidInput as refusal:
        yield from refusal.problems


def number(value: object, field: str) -> Iterator[Problem]:
    """An int or float that a float can hold; truth values, digits in quotes and narrower floats are none."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        yield Problem(f"{shortened(value)} is not a number", field=field, cure="a number (int or float)")
        return
    try:
        float(value)
    except OverflowError:
        yield Problem("the number is too large", field=field, cure="a number below 1e308")


def _whole(value: object, field: str) -> Iterator[Problem]:
    if isinstance(value, bool) or not isinstance(value, int):
        yield Problem(f"{shortened(value)} is not a whole number", field=field, cure="a whole number")
    elif abs(value) > LARGEST_WHOLE:
        yield Problem("the number is too large", field=field, cure=f"a whole number up to {LARGEST_WHOLE}")


def _truth(value: object, field: str) -> Iterator[Problem]:
    if not isinstance(value, bool):
        yield Problem(f"{shortened(value)} is neither true nor false", field=field, cure="true or false")


def _prior(value: object, field: str) -> Iterator[Problem]:
    if isinstance(value, Prior):
        yield from mistyped(value, field)
    else:
        yield Problem(f"{shortened(value)} is not a prior", field=field, cure="mean and sd")


def _numbers_by_name(value: object, field: str) -> Iterator[Problem]:
    if not isinstance(value, Mapping):
        cure = "a number for each name of a group or run"
        yield Problem(f"{shortened(value)} does not map names to numbers", field=field, cure=cure)
        return
    for name, entry in value.items():
        unusable = list(text(name, field))
        yield from unusable or number(entry, f"{field}.{name}")


def _or_none(rule: Rule) -> Rule:
    def optional(value: object, field: str) -> Iterator[Problem]:
        if value is not None:
            yield from rule(value, field)

    return optional


RULES: Mapping[type, Mapping[str, Rule]] = {
    Prior: {"mean": number, "sd": number},
    Constant: {
        "name": text,
        "start": number,
        "scope": text,
        "lower": _or_none(number),
        "upper": _or_none(number),
        "prior": _or_none(_prior),
        "group_by": _or_none(text),
        "starts": _numbers_by_name,
        "positive": _truth,
    },
    StartConcentration: {
        "species": text,
        "start": number,
        "scope": text,
        "lower": _or_none(number),
        "upper": _or_none(number),
        "prior": _or_none(_prior),
    },
    Nuisance: {"name": text, "owner": text, "sd": number, "kind": text},
    Settings: {
        "error_model": text,
        "rtol": number,
        "starts": _whole,
        "seed": _whole,
        "start_spread": number,
        "max_iterations": _whole,
        "max_steps": _whole,
        "max_seconds": number,
        "confidence": number,
    },
}
