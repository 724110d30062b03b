"""A query for runs as named parameters of an address, for REST."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from functools import partial
from typing import Any

from kinetics_db.engine.plain_text import plain_text
from kinetics_db.engine.units import convert, kind_of_unit, parse_quantity
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.runs.query import Range, RunQuery, StartRange
from kinetics_db.runs.query_text import (
    NO_WAVELENGTHS,
    WITHOUT_WAVELENGTHS,
    control_from_text,
    day_from_text,
)

PARAMETERS: Mapping[str, str] = {
    "project": "short name of the project",
    "compound": "name of a compound that is put in",
    "c0_min": "lowest start concentration of that compound",
    "c0_max": "highest start concentration of that compound",
    "c0_unit": "unit of c0_min and c0_max; mol/L when left out, % for runs in percent",
    "T_min": "lowest temperature in K, or with its unit: 40 degC",
    "T_max": "highest temperature in K, or with its unit",
    "volume_min": "smallest volume in L, or with its unit: 5 mL",
    "volume_max": "largest volume in L, or with its unit",
    "after": "logged on that day or later: 2026-03-01",
    "before": "logged before that day began: 2026-04-01",
    "code": "how the run's code begins",
    "author": "user name of who logged it",
    "control": "a kind of control, 'any', or 'none'",
    "replicate_of": "code of the run that it repeats",
    "has": "'table', or 'no table' for runs that wait for their file or its reduction",
}
LONGEST = 200


def query_from_params(params: Mapping[str, Any], *, ignore: Iterable[str] = ()) -> RunQuery:
    """See `RunQuery.from_params`."""
    return _Reader(params, set(ignore)).query()


class _Reader:
    """Reads parameters; what is wrong is collected and told at the end. Empty ones count as left out."""

    def __init__(self, params: Mapping[str, Any], ignore: set[str]) -> None:
        self.problems: list[Problem] = []
        self.given: dict[str, str] = {}
        for name in params:
            if name in ignore:
                continue
            if name == "wavelength":
                self.wrong(name, NO_WAVELENGTHS, WITHOUT_WAVELENGTHS)
            elif name not in PARAMETERS:
                self.wrong(str(name)[:80], "unknown parameter", ", ".join(PARAMETERS))
            elif text := self.read(name, partial(_text, params[name], name)):
                self.given[name] = text

    def query(self) -> RunQuery:
        given = self.given
        query = RunQuery(
            starts=self.starts(),
            temperature=self.span("T_min", "T_max", "temperature", "K"),
            volume=self.span("volume_min", "volume_max", "volume", "L"),
            after=self.read("after", lambda: day_from_text(given["after"])),
            before=self.read("before", lambda: day_from_text(given["before"])),
            control=self.read("control", lambda: control_from_text(given["control"])),
            table=self.read("has", lambda: _table(given["has"])),
            **{name: given.get(name, "") for name in ("code", "author", "replicate_of", "project")},
        )
        if self.problems:
            raise InvalidInput(self.problems)
        return query

    def starts(self) -> tuple[StartRange, ...]:
        compound, unit = self.given.get("compound"), self.given.get("c0_unit", "mol/L")
        stated = [name for name in ("c0_min", "c0_max", "c0_unit") if name in self.given]
        if compound is None:
            for name in stated:
                self.wrong(name, "a start concentration of what?", "give compound too")
            return ()
        kind = self.read("c0_unit", lambda: _kind(unit))
        if kind is None:
            return ()
        if kind == "relative":
            span = self.span("c0_min", "c0_max", "relative", unit)
            return (StartRange(compound, span, relative=True),)
        return (StartRange(compound, self.span("c0_min", "c0_max", "concentration", unit)),)

    def span(self, low: str, high: str, kind: str, unit: str) -> Range | None:
        ends = [self.read(name, partial(self.number, name, kind, unit)) for name in (low, high)]
        if ends[0] is not None and ends[1] is not None and ends[0] > ends[1]:
            self.wrong(high, f"{high} is below {low}", "the smaller number as the lowest")
        return None if ends == [None, None] else Range(*ends)

    def number(self, name: str, kind: str, unit: str) -> float:
        return _number(self.given[name], kind, unit)

    def read(self, name: str, reader: Callable[[], Any]) -> Any:
        """What a reader makes of a parameter; None where it is left out or cannot be read."""
        try:
            return reader()
        except InvalidInput as error:
            for problem in error.problems:
                self.wrong(name, problem.message, problem.cure)
        except KeyError:
            pass
        return None

    def wrong(self, field: str, message: str, cure: str) -> None:
        self.problems.append(Problem(message, field=field, cure=cure))


def _text(value: object, name: str) -> str:
    if isinstance(value, int | float) and not isinstance(value, bool):
        value = repr(value)
    return plain_text(value, field=name, longest=LONGEST)


def _kind(unit: str) -> str:
    kind = kind_of_unit(unit)
    if kind not in ("concentration", "relative"):
        raise InvalidInput(f"'{unit}' is no unit of concentration", cure="for example mM, mol/L or %")
    return kind


def _number(text: str, kind: str, unit: str) -> float:
    """The stored value of a number that stands in ``unit`` unless it brings its own."""
    value, own = parse_quantity(text)
    unit = own or unit
    if kind_of_unit(unit) != kind:
        raise InvalidInput(f"'{unit}' is no unit of {kind}", cure=f"a {kind}")
    if not math.isfinite(value):
        raise InvalidInput(f"{text} is not finite", cure="a finite number")
    stored = {"temperature": "K", "volume": "L", "concentration": "mol/L", "relative": "%"}[kind]
    return float(convert(value, unit, stored))


def _table(text: str) -> bool:
    found = {"table": True, "no table": False}.get(text)
    if found is None:
        raise InvalidInput(f"'{text}' is not understood", cure="table, or no table")
    return found
