"""From a run as entered to the resolved snapshot that a revision keeps.

The snapshot holds what was typed (``entered``) and what the engine reads (``start``, ``temperature``,
``first_contact``), so that a later reader needs neither today's code nor other records.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from kinetics_db.engine import amounts
from kinetics_db.engine.units import STORED_UNITS, convert, kind_of_unit, to_stored
from kinetics_db.errors import InvalidInput, NotFound, Problem
from kinetics_db.materials.selectors import compound_named, lot_named, stock_named
from kinetics_db.materials.sources import Source
from kinetics_db.runs.entry import CONTROL_KINDS, SECTIONS, Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run
from kinetics_db.runs.query import condition_key

FORMAT = "ratewright/run/1"


@dataclass
class Resolved:
    """A snapshot, and the records that it was resolved from, charge by charge."""

    content: dict[str, Any]
    sources: list[Source] = field(default_factory=list)

    @property
    def conditions(self) -> dict[str, float]:
        """Numbers by which the run is searched."""
        found: dict[str, float] = {}
        for part in self.content["start"]:
            key = condition_key(part["compound"], relative=self.content["basis"] == "relative")
            found[key] = found.get(key, 0.0) + part["concentration"]
        if self.content["temperature"]:
            found["temperature"] = self.content["temperature"]["value"]
        if self.content["volume"]:
            found["volume"] = self.content["volume"]["value"]
        return found


def resolve(entry: RunEntry, *, project_id: int) -> Resolved:
    """Check an entry, look up its materials and compute start concentrations with their causes of error.

    InvalidInput holds every problem found, each with its field ('charges.2.unit' counts charges from 1).
    """
    resolved, problems = resolve_what_can_be(entry, project_id=project_id)
    if problems:
        raise InvalidInput(problems)
    return resolved


def resolve_what_can_be(entry: RunEntry, *, project_id: int) -> tuple[Resolved, list[Problem]]:
    """As `resolve`, but with the problems beside what could be resolved in spite of them."""
    problems = _plain_problems(entry, project_id)
    sources = [_source(charge, i, project_id, problems) for i, charge in enumerate(entry.charges, start=1)]
    volume, assumed = _volume(entry, problems)
    temperature = _temperature(entry.temperature, problems)
    relative = [_kind(charge.amount.unit) == "relative" for charge in entry.charges]
    start: list[dict[str, Any]] = []
    for i, (charge, source) in enumerate(zip(entry.charges, sources, strict=True), start=1):
        if source.records:
            start += _start(charge, source, i, volume, problems)
    if any(relative) and not all(relative):
        start = []
        problems.append(
            Problem(
                "relative and absolute charges are mixed", field="charges", cure="all in percent, or none"
            )
        )
    sections = _sections(entry, problems)
    content = {
        "format": FORMAT,
        "code": entry.code,
        "basis": "relative" if any(relative) else "mol/L",
        "entered": {
            "charges": [
                _entered(charge, source) for charge, source in zip(entry.charges, sources, strict=True)
            ],
            "total_volume": _plain(entry.total_volume),
            "temperature": _plain(entry.temperature),
        },
        "start": start,
        "volume": {"value": volume.value, "u": volume.standard_uncertainty, "assumed_additive": assumed}
        if volume
        else None,
        "temperature": temperature,
        "first_contact": sections.get("clock", {}).get("first contact", {}).get("value", 0.0),
        "atmosphere": entry.atmosphere,
        "started": entry.started,
        "replicate_of": entry.replicate_of,
        "control_kind": entry.control_kind,
        "notes": entry.notes,
        "sections": sections,
        "events": [],
    }
    return Resolved(content, sources), problems


def _plain_problems(entry: RunEntry, project_id: int) -> list[Problem]:
    found = []
    if not entry.code:
        found.append(Problem("the run has no code", field="code", cure="1 to 80 characters"))
    if not entry.charges:
        found.append(Problem("nothing was put in", field="charges", cure="at least one charge"))
    if entry.control_kind not in CONTROL_KINDS:
        found.append(
            Problem(
                f"'{entry.control_kind}' is no kind of control",
                field="control_kind",
                cure=", ".join(k for k in CONTROL_KINDS if k),
            )
        )
    others = Run.objects.filter(project_id=project_id).exclude(code=entry.code)
    if entry.replicate_of and not others.filter(code=entry.replicate_of).exists():
        found.append(
            Problem(
                f"'{entry.replicate_of}' is no other run of this project",
                field="replicate_of",
                cure="a run's code",
            )
        )
    if entry.started:
        try:
            if datetime.fromisoformat(entry.started).tzinfo is None:
                raise ValueError
        except ValueError:
            found.append(
                Problem(
                    f"'{entry.started[:40]}' is no date and time with a zone",
                    field="started",
                    cure="for example 2026-03-05T09:30:00+01:00",
                )
            )
    return found


def _source(charge: ChargeEntry, position: int, project_id: int, problems: list[Problem]) -> Source:
    given = [name for name in (charge.compound, charge.lot, charge.stock) if name]
    where = f"charges.{position}"
    if len(given) != 1:
        problems.append(
            Problem("a charge is of one compound, lot or stock", field=where, cure="exactly one of the three")
        )
        return Source()
    try:
        if charge.stock:
            return Source(stock=stock_named(project_id=project_id, code=charge.stock))
        if charge.lot:
            lot = lot_named(project_id=project_id, code=charge.lot)
            return Source(compound=lot.compound_revision, lot=lot)
        return Source(compound=compound_named(project_id=project_id, name=str(charge.compound)))
    except NotFound as error:
        problems.append(Problem(str(error), field=where, cure="enter it first, or correct the name"))
        return Source()


def _kind(unit: str) -> str:
    try:
        return kind_of_unit(unit)
    except InvalidInput:
        return ""


def _volume(entry: RunEntry, problems: list[Problem]) -> tuple[amounts.TotalVolume | None, bool]:
    """Total volume as entered, else the sum of the charged volumes (additivity assumed and flagged)."""
    if entry.total_volume is not None:
        with collected(problems, "total_volume"):
            return _total(entry.total_volume), False
        return None, False
    kinds = [_kind(charge.amount.unit) for charge in entry.charges]
    if all(kind in ("concentration", "relative") for kind in kinds):
        return None, False
    parts = []
    for charge, kind in zip(entry.charges, kinds, strict=True):
        if kind == "volume" and charge.amount.value > 0:
            with collected([], ""):  # what is wrong with a charge is told at the charge itself
                parts.append(_total(charge.amount))
    if not parts:
        problems.append(
            Problem(
                "the total volume is not known", field="total_volume", cure="a volume, for example 10.0 mL"
            )
        )
        return None, False
    value = sum(part.value for part in parts)
    return amounts.TotalVolume(value, sum(part.standard_uncertainty**2 for part in parts) ** 0.5), True


def _total(amount: Amount) -> amounts.TotalVolume:
    return amounts.TotalVolume(
        float(to_stored(amount.value, amount.unit, "volume")),
        float(to_stored(amount.uncertainty, amount.unit, "volume")),
    )


def _temperature(amount: Amount | None, problems: list[Problem]) -> dict[str, float] | None:
    if amount is None:
        return None
    with collected(problems, "temperature"):
        value = float(convert(amount.value, amount.unit, "K"))
        if not 1.0 < value < 5000.0:
            raise InvalidInput(
                f"{amount.value} {amount.unit} is no reaction temperature", cure="for example 25 degC"
            )
        if not 0.0 <= amount.uncertainty < 1000.0:
            raise InvalidInput(f"uncertainty {amount.uncertainty}", cure="0 or more")
        return {"value": value, "u": float(convert(amount.uncertainty, amount.unit, "K", difference=True))}
    return None


def _start(
    charge: ChargeEntry,
    source: Source,
    position: int,
    volume: amounts.TotalVolume | None,
    problems: list[Problem],
) -> list[dict[str, Any]]:
    label = f"charge {position}"
    with collected(problems, f"charges.{position}"):
        entered = amounts.Charge(
            source.for_engine(),
            charge.amount.value,
            charge.amount.unit,
            charge.amount.uncertainty,
        )
        if _kind(charge.amount.unit) == "relative":
            if source.compound is None:
                raise InvalidInput(
                    "a stock cannot be charged in percent", cure="a volume or mass of the stock"
                )
            return [
                {
                    "label": label,
                    "compound": source.compound.compound.name,
                    "amount": None,
                    "concentration": 100.0
                    * float(to_stored(charge.amount.value, charge.amount.unit, "relative")),
                    "own_relative_u": entered.relative_u,
                    "shared": [],
                    "run_shared": [],
                }
            ]
        parts = amounts.charge_contributions(entered, volume or amounts.TotalVolume(1.0), position)
        if volume is None and _kind(charge.amount.unit) != "concentration":
            return []  # no volume, no concentration; that it is missing is told at its own place
        return [
            {
                "label": label,
                "compound": part.compound,
                "amount": part.amount if volume is not None else None,
                "concentration": part.concentration,
                "own_relative_u": part.own_relative_u,
                "shared": [{"owner": e.owner, "relative_u": e.relative_u} for e in part.shared],
                "run_shared": [{"owner": e.owner, "relative_u": e.relative_u} for e in part.run_shared],
            }
            for part in parts
        ]
    return []


def _sections(entry: RunEntry, problems: list[Problem]) -> dict[str, Any]:
    kept: dict[str, Any] = {}
    for name, values in entry.sections.items():
        known = SECTIONS.get(name)
        if known is None:
            problems.append(Problem(f"unknown section '{name}'", field="sections", cure=", ".join(SECTIONS)))
            continue
        for key, value in values.items():
            where = f"sections.{name}.{key}"
            kind = known.get(key)
            if kind is None:
                problems.append(Problem(f"unknown entry '{key}'", field=where, cure=", ".join(known)))
            elif kind == "text":
                if not isinstance(value, str) or len(value) > 2000:
                    problems.append(Problem("not a text", field=where, cure="up to 2000 characters"))
                else:
                    kept.setdefault(name, {})[key] = value
            elif not isinstance(value, Amount):
                problems.append(Problem("not a number with a unit", field=where, cure=f"a {kind}"))
            else:
                with collected(problems, where):
                    if kind_of_unit(value.unit) != kind:
                        raise InvalidInput(f"'{value.unit}' is no unit of {kind}")
                    unit = "Pa" if kind == "pressure" else STORED_UNITS[kind]
                    stored = float(convert(value.value, value.unit, unit))
                    kept.setdefault(name, {})[key] = {"value": stored, "entered": _plain(value)}
    return kept


class collected:  # noqa: N801  reads as a word in 'with'
    """Collects InvalidInput of a block under a field, instead of ending the whole check."""

    def __init__(self, problems: list[Problem], where: str):
        self.problems, self.where = problems, where

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> bool:
        if not isinstance(error, InvalidInput):
            return False
        for p in error.problems:
            field_name = ".".join(part for part in (self.where, p.field) if part)
            self.problems.append(Problem(p.message, p.line, p.column, field_name, p.cure, p.severity))
        return True


def _plain(amount: Amount | None) -> dict[str, Any] | None:
    return None if amount is None else {"value": amount.value, "unit": amount.unit, "u": amount.uncertainty}


def _entered(charge: ChargeEntry, source: Source) -> dict[str, Any]:
    return {
        "compound": source.compound.digest if source.compound is not None else None,
        "lot": source.lot.digest if source.lot is not None else None,
        "stock": source.stock.digest if source.stock is not None else None,
        "name": charge.stock or charge.lot or charge.compound,
        "amount": _plain(charge.amount),
        "note": charge.note,
    }
