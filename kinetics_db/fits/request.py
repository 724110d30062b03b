"""A fit's request as plain values, and back."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import MISSING, asdict, dataclass, fields
from reprlib import repr as shortened
from typing import Any, TypeVar

from kinetics_db.engine.fitting.mistyped import mistyped, text
from kinetics_db.engine.fitting.problem import Constant, Prior, Settings, StartConcentration
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.fits.casting import Casting

FORMAT = "ratewright/fit/1"
ENTRIES = ("casting", "constants", "start_concentrations", "settings", "without_owners")
Made = TypeVar("Made", Constant, StartConcentration, Prior, Settings)


@dataclass(frozen=True)
class FitRequest:
    """What is chosen for a fit besides its dataset and mechanism version.

    ``without_owners`` names causes of error (a stock, a standard, a run) whose nuisance parameters are left out.
    """

    casting: Casting
    constants: tuple[Constant, ...]
    start_concentrations: tuple[StartConcentration, ...] = ()
    settings: Settings = Settings()
    without_owners: tuple[str, ...] = ()

    def to_plain(self) -> dict[str, Any]:
        """Plain values in a fixed order, so that equal requests have equal hashes."""
        return {
            "casting": self.casting.to_plain(),
            "constants": [asdict(c) for c in sorted(self.constants, key=lambda c: c.name)],
            "start_concentrations": [
                asdict(s) for s in sorted(self.start_concentrations, key=lambda s: s.species)
            ],
            "settings": asdict(self.settings),
            "without_owners": sorted(set(self.without_owners)),
        }

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> FitRequest:
        """Inverse of `to_plain`.

        Raises
        ------
        InvalidInput
            Naming every entry that is missing, unknown or of a wrong type; sizes are left to `check_fit`.
        """
        whole = _mapping(plain, "request")
        missing = [name for name in ENTRIES if name not in whole]
        if missing:
            raise InvalidInput([_missing(name) for name in missing])
        return cls(
            _casting(whole["casting"]),
            constants_from_plain(whole["constants"]),
            tuple(
                _made(StartConcentration, entry, f"start_concentrations.{i}")
                for i, entry in _numbered(whole["start_concentrations"], "start_concentrations")
            ),
            _made(Settings, whole["settings"], "settings"),
            _texts(whole["without_owners"], "without_owners"),
        )


def constants_from_plain(entries: Sequence[Mapping[str, Any]]) -> tuple[Constant, ...]:
    """Constants of a request; InvalidInput names the entry and field that cannot be used."""
    return tuple(_made(Constant, entry, f"constants.{i}") for i, entry in _numbered(entries, "constants"))


def _made(kind: type[Made], entry: object, where: str) -> Made:
    given = _mapping(entry, where)
    known = {f.name: f for f in fields(kind)}
    problems = [
        Problem(f"unknown entry {shortened(name)}", field=where, cure=", ".join(sorted(known)))
        for name in given
        if name not in known
    ]
    problems += [
        _missing(f"{where}.{f.name}")
        for f in known.values()
        if f.name not in given and f.default is MISSING and f.default_factory is MISSING
    ]
    if problems:
        raise InvalidInput(problems)
    values = dict(given)
    if values.get("prior") is not None and not isinstance(values["prior"], Prior):
        values["prior"] = _made(Prior, values["prior"], f"{where}.prior")
    made = kind(**values)
    problems = list(mistyped(made, where))
    if problems:
        raise InvalidInput(problems)
    return made


def _casting(value: object) -> Casting:
    given = _mapping(value, "casting")
    maps: dict[str, dict[str, str | None]] = {}
    for name in ("compounds", "columns"):
        where = f"casting.{name}"
        if name not in given:
            raise InvalidInput([_missing(where)])
        maps[name] = dict(_mapping(given[name], where))
        problems = [p for key in maps[name] for p in text(key, where)]
        problems += [p for k, v in maps[name].items() if v is not None for p in text(v, f"{where}.{k}")]
        if problems:
            raise InvalidInput(problems)
    return Casting(maps["compounds"], maps["columns"])


def _texts(value: object, where: str) -> tuple[str, ...]:
    entries = _numbered(value, where)
    problems = [p for i, entry in entries for p in text(entry, f"{where}.{i}")]
    if problems:
        raise InvalidInput(problems)
    return tuple(entry for _, entry in entries)


def _numbered(value: object, where: str) -> list[tuple[int, Any]]:
    """Entries of a list, counted from 1."""
    if not isinstance(value, Sequence) or isinstance(value, str | bytes):
        raise InvalidInput(f"{shortened(value)} is not a list", field=where, cure="a list")
    return list(enumerate(value, start=1))


def _mapping(value: object, where: str) -> Mapping[str, Any]:
    if not isinstance(value, Mapping):
        raise InvalidInput(
            f"{shortened(value)} is not a set of named values", field=where, cure="names and values"
        )
    return value


def _missing(where: str) -> Problem:
    return Problem("an entry is missing", field=where, cure="give it")
