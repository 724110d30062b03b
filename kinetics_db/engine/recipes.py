"""Recipes that turn signals into concentrations: what a person states, kept as canonical JSON."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields
from typing import Any, ClassVar

from kinetics_db.engine.plain_text import plain_text
from kinetics_db.engine.units import is_unit
from kinetics_db.errors import InvalidInput, Problem

Check = Callable[[float], bool]

_POSITIVE: tuple[Check, str] = (lambda v: math.isfinite(v) and v > 0, "above 0")
_NOT_NEGATIVE: tuple[Check, str] = (lambda v: math.isfinite(v) and v >= 0, "0 or more")


def _checked(recipe: object, rules: Mapping[str, tuple[Check, str]], where: str = "") -> list[Problem]:
    """Problems of the numeric fields of a recipe; None means 'not stated'."""
    problems = []
    for name, (holds, cure) in rules.items():
        value = getattr(recipe, name)
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if value is not None and not (number and holds(value)):
            problems.append(Problem(f"{name} is {value!r}", field=where + name, cure=cure))
    return problems


def _refuse_double(names: list[str], field_name: str) -> list[Problem]:
    double = sorted({name for name in names if names.count(name) > 1})
    return [Problem(f"'{name}' stands twice", field=field_name, cure="once each") for name in double]


@dataclass(frozen=True)
class MeasuredSignal:
    """One signal of the table and the species that it measures.

    Attributes
    ----------
    signal, species : name of the column, and of the species
    nuclei : nuclei (or groups) behind the signal
    response_factor, response_relative_u : f_X, 1 for ideal NMR, and its relative standard uncertainty
    t1, t1_u : longitudinal relaxation time and its standard uncertainty, s
    saturation_relative_u : stated instead of an unknown T1
    noise : standard uncertainty of the signal in its own unit, over that of the recipe
    """

    signal: str
    species: str
    nuclei: float
    response_factor: float = 1.0
    response_relative_u: float = 0.0
    t1: float | None = None
    t1_u: float = 0.0
    saturation_relative_u: float = 0.0
    noise: float | None = None

    def problems(self, where: str) -> list[Problem]:
        return _checked(self, _SIGNAL_RULES, where)


_SIGNAL_RULES = {
    "nuclei": _POSITIVE, "response_factor": _POSITIVE, "response_relative_u": _NOT_NEGATIVE, "t1": _POSITIVE,
    "t1_u": _NOT_NEGATIVE, "saturation_relative_u": _NOT_NEGATIVE, "noise": _POSITIVE,
}  # fmt: skip


@dataclass(frozen=True)
class InternalStandard:
    """Concentrations against a standard in the same solution.

    Attributes
    ----------
    standard : the standard's signal; its ``species`` is its name, its response factor must be 1
    standard_concentration, standard_relative_u : mol/L in the vessel, and its relative standard uncertainty
    standard_owner : whose error that is, such as 'stock 3'
    signals : what is measured against it
    noise_absolute : standard uncertainty of every signal, in the unit of the signals
    noise_relative : the same as a fraction of the signal; both add in quadrature; with neither of them (and
        no ``noise`` of a signal) the scatter of each signal about its neighbours is taken
    repetition_time : s, acquisition and delay together; None when no saturation is corrected
    flip_angle : degrees
    seed, draws : of the Monte Carlo for weak signals
    """

    kind: ClassVar[str] = "internal standard"

    standard: MeasuredSignal
    standard_concentration: float
    signals: tuple[MeasuredSignal, ...]
    standard_relative_u: float = 0.0
    standard_owner: str = "standard"
    noise_absolute: float | None = None
    noise_relative: float | None = None
    repetition_time: float | None = None
    flip_angle: float = 90.0
    seed: int = 1
    draws: int = 20_000

    def __post_init__(self) -> None:
        problems = _checked(
            self,
            {
                "standard_concentration": _POSITIVE,
                "standard_relative_u": _NOT_NEGATIVE,
                "noise_absolute": _NOT_NEGATIVE,
                "noise_relative": _NOT_NEGATIVE,
                "repetition_time": _POSITIVE,
                "flip_angle": (lambda v: 0 < v < 180, "between 0 and 180 degrees"),
                "seed": (lambda v: v == int(v) and 0 <= v < 2**53, "a whole number from 0"),
                "draws": (lambda v: v == int(v) and 1000 <= v <= 1_000_000, "from 1000 to 1000000"),
            },
        )
        problems += self.standard.problems("standard.")
        for i, signal in enumerate(self.signals):
            problems += signal.problems(f"signals[{i}].")
        if self.standard.response_factor != 1 or self.standard.response_relative_u != 0:
            message = "response factors are relative to the standard, whose own is 1"
            problems.append(Problem(message, field="standard.response_factor", cure="1, without uncertainty"))
        if not self.signals:
            problems.append(Problem("no signal is to be reduced", field="signals", cure="at least one"))
        problems += _refuse_double([s.species for s in (self.standard, *self.signals)], "signals.species")
        problems += _refuse_double([s.signal for s in (self.standard, *self.signals)], "signals.signal")
        given = [v for v in (self.noise_absolute, self.noise_relative) if v is not None]
        if given and not any(given):
            cure = "one of them above 0; or neither, and it is estimated"
            problems.append(Problem("a noise of zero", field="noise_absolute", cure=cure))
        if self.repetition_time is not None:
            problems += [
                Problem(
                    f"the T1 of '{s.signal}' is not stated", field="t1", cure="t1, or a saturation_relative_u"
                )
                for s in (self.standard, *self.signals)
                if s.t1 is None and s.saturation_relative_u == 0
            ]
        if problems:
            raise InvalidInput(problems)

    def to_plain(self) -> dict[str, Any]:
        """Plain values for canonical JSON, with the ``kind``."""
        return {"kind": self.kind, **_plain(self)}

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> InternalStandard:
        """Inverse of `to_plain`; InvalidInput names the field that is wrong."""
        values = _values(cls, plain, "")
        values["standard"] = _nested(MeasuredSignal, values["standard"], "standard")
        values["signals"] = _nested_list(MeasuredSignal, values["signals"], "signals")
        return cls(**values)


@dataclass(frozen=True)
class ReportedColumn:
    """A column that holds a concentration already.

    ``unit`` overrides that of the table; ``uncertainty_signal`` names the column with its standard
    uncertainties, in the same unit.
    """

    signal: str
    species: str
    unit: str | None = None
    uncertainty_signal: str | None = None


@dataclass(frozen=True)
class AsReported:
    """Concentrations, percentages or fractions taken as the file reports them.

    Attributes
    ----------
    columns : which columns are which species
    constant_u : standard uncertainty of every value, in the unit that the column is reported in
    relative_u : the same as a fraction of the value; both add in quadrature. With neither of them and no
        uncertainty column the uncertainties stay missing and a fit has to estimate them.
    scale_relative_u, scale_owner : an error common to all values (a calibration), and whose it is
    """

    kind: ClassVar[str] = "as reported"

    columns: tuple[ReportedColumn, ...]
    constant_u: float | None = None
    relative_u: float | None = None
    scale_relative_u: float = 0.0
    scale_owner: str = "calibration"

    def __post_init__(self) -> None:
        problems = _checked(
            self,
            {"constant_u": _POSITIVE, "relative_u": _POSITIVE, "scale_relative_u": _NOT_NEGATIVE},
        )
        if not self.columns:
            problems.append(Problem("no column is to be taken", field="columns", cure="at least one"))
        problems += _refuse_double([c.species for c in self.columns], "columns.species")
        problems += _refuse_double([c.signal for c in self.columns], "columns.signal")
        for i, column in enumerate(self.columns):
            if column.unit is not None and not is_unit(column.unit):
                message = f"unknown unit {column.unit!r}"
                problems.append(Problem(message, field=f"columns[{i}].unit", cure="such as mM, % or 1"))
        if problems:
            raise InvalidInput(problems)

    def to_plain(self) -> dict[str, Any]:
        """Plain values for canonical JSON, with the ``kind``."""
        return {"kind": self.kind, **_plain(self)}

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> AsReported:
        """Inverse of `to_plain`; InvalidInput names the field that is wrong."""
        values = _values(cls, plain, "")
        values["columns"] = _nested_list(ReportedColumn, values["columns"], "columns")
        return cls(**values)


Recipe = InternalStandard | AsReported

#: Recipes by their kind.
RECIPES: Mapping[str, type[InternalStandard] | type[AsReported]] = {
    InternalStandard.kind: InternalStandard,
    AsReported.kind: AsReported,
}


def recipe_from_plain(plain: Mapping[str, Any]) -> Recipe:
    """The recipe of the stated ``kind``; InvalidInput for an unknown one."""
    kind = plain.get("kind") if isinstance(plain, Mapping) else None
    if not isinstance(kind, str) or kind not in RECIPES:
        raise InvalidInput(
            f"there is no recipe of kind {kind!r}", field="kind", cure="one of " + ", ".join(RECIPES)
        )
    return RECIPES[kind].from_plain(plain)


def _plain(recipe: Any) -> dict[str, Any]:
    def value(item: Any) -> Any:
        if dataclasses.is_dataclass(item):
            return _plain(item)
        return [value(part) for part in item] if isinstance(item, tuple) else item

    return {f.name: value(getattr(recipe, f.name)) for f in fields(recipe)}


def _values(cls: type, plain: Any, where: str) -> dict[str, Any]:
    """Keyword arguments for a recipe, with every unknown, absent or wrongly typed field named."""
    if not isinstance(plain, Mapping):
        raise InvalidInput(f"{plain!r} is no mapping of fields", field=where or None, cure="named fields")
    known = {f.name: f for f in fields(cls)}
    problems = [
        Problem(f"unknown field '{name}'", field=f"{where}{name}", cure="one of " + ", ".join(known))
        for name in plain
        if name not in known and not (name == "kind" and not where)
    ]
    values = {}
    for name, f in known.items():
        if name not in plain:
            if f.default is dataclasses.MISSING:
                problems.append(Problem(f"'{name}' is not stated", field=f"{where}{name}", cure="state it"))
            continue
        if not _TYPES.get(str(f.type), lambda _: True)(plain[name]):
            problems.append(Problem(f"{plain[name]!r} is no {f.type}", field=f"{where}{name}"))
        values[name] = plain[name]
        if isinstance(values[name], str):
            try:
                values[name] = plain_text(values[name], field=f"{where}{name}", longest=120)
            except InvalidInput as error:
                problems.extend(error.problems)
    if problems:
        raise InvalidInput(problems)
    return values


def _nested(cls: type, plain: Any, where: str) -> Any:
    return cls(**_values(cls, plain, f"{where}."))


def _nested_list(cls: type, plain: Any, where: str) -> tuple[Any, ...]:
    if not isinstance(plain, list | tuple):
        raise InvalidInput(f"{plain!r} is no list", field=where, cure="a list")
    return tuple(_nested(cls, item, f"{where}[{i}]") for i, item in enumerate(plain))


def _number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


_TYPES: Mapping[str, Callable[[Any], bool]] = {
    "str": lambda v: isinstance(v, str) and v != "",
    "str | None": lambda v: v is None or isinstance(v, str),
    "float": _number,
    "float | None": lambda v: v is None or _number(v),
    "int": lambda v: isinstance(v, int) and not isinstance(v, bool),
}
