"""A fit's request as plain values, and back."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, fields
from typing import Any, TypeVar

from kinetics_db.engine.fitting.problem import Constant, Prior, Settings, StartConcentration
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.fits.casting import Casting

FORMAT = "ratewright/fit/1"
Made = TypeVar("Made")


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
        """Inverse of `to_plain`."""
        return cls(
            Casting.from_plain(plain["casting"]),
            constants_from_plain(plain["constants"]),
            tuple(
                _made(StartConcentration, entry, f"start_concentrations.{i}")
                for i, entry in enumerate(plain["start_concentrations"], start=1)
            ),
            _made(Settings, plain["settings"], "settings"),
            tuple(plain["without_owners"]),
        )


def constants_from_plain(entries: Sequence[Mapping[str, Any]]) -> tuple[Constant, ...]:
    """Constants of a request; InvalidInput names the entry and field that cannot be used."""
    return tuple(_made(Constant, entry, f"constants.{i}") for i, entry in enumerate(entries, start=1))


def _made(kind: type[Made], entry: Mapping[str, Any], where: str) -> Made:
    known = {f.name for f in fields(kind)}  # type: ignore[arg-type]
    unknown = sorted(set(entry) - known)
    if unknown:
        raise InvalidInput(
            [
                Problem(f"unknown entry '{name}'", field=f"{where}.{name}", cure=", ".join(sorted(known)))
                for name in unknown
            ]
        )
    values = dict(entry)
    if values.get("prior") is not None and not isinstance(values["prior"], Prior):
        values["prior"] = _made(Prior, values["prior"], f"{where}.prior")
    try:
        return kind(**values)
    except TypeError as error:
        raise InvalidInput(f"an entry is missing: {error}", field=where) from error
