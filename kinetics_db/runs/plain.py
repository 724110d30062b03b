"""A run's entry as plain JSON values, and back.

``{"code": "K01", "charges": [{"compound": "ester", "amount": {"value": 12.3, "unit": "mg", "uncertainty": 0.1}}],
"total_volume": {"value": 10, "unit": "mL"}, "sections": {"clock": {"first contact": {"value": 5, "unit": "s"}}}}``:
what `RunEntry` holds, by the same names. What is left out or null was not stated.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import fields
from reprlib import repr as shortened
from typing import Any

from kinetics_db.engine.canonical import MAX_INTEGER
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.runs.entry import LONGEST, MOST_CHARGES, SECTIONS, WITH_LINES, Amount, ChargeEntry, RunEntry

LONGEST_UNIT = 60
SOURCES = ("compound", "lot", "stock")
AMOUNTS = ("total_volume", "temperature")
TEXTS = ("code", "atmosphere", "started", "replicate_of", "control_kind", "notes")
ENTRIES = tuple(f.name for f in fields(RunEntry))


def entry_from_plain(plain: Mapping[str, Any]) -> RunEntry:
    """Inverse of `entry_to_plain`; whether materials and units are known is left to `log_run`.

    Raises
    ------
    InvalidInput
        with a problem for every entry that is missing, unknown, mistyped or too long; its field is the entry's
        path, such as 'charges.2.amount.unit' (charges count from 1).
    """
    return _Reader().entry(plain)


def entry_to_plain(entry: RunEntry) -> dict[str, Any]:
    """Plain values of an entry, every name of it present; numbers stay as they were typed."""
    return {
        "code": entry.code,
        "charges": [
            {
                **{name: getattr(charge, name) for name in SOURCES},
                "amount": _amount_to_plain(charge.amount),
                "note": charge.note,
            }
            for charge in entry.charges
        ],
        **{name: _amount_to_plain(getattr(entry, name)) for name in AMOUNTS},
        **{name: getattr(entry, name) for name in TEXTS if name != "code"},
        "sections": {
            section: {
                key: _amount_to_plain(value) if isinstance(value, Amount) else value
                for key, value in values.items()
            }
            for section, values in entry.sections.items()
        },
    }


def _amount_to_plain(amount: Amount | None) -> dict[str, Any] | None:
    if amount is None:
        return None
    return {"value": amount.value, "unit": amount.unit, "uncertainty": amount.uncertainty}


class _Reader:
    """Reads plain values; what is wrong is collected and told at the end."""

    def __init__(self) -> None:
        self.problems: list[Problem] = []

    def entry(self, plain: object) -> RunEntry:
        given = self.named(plain, "entry", ENTRIES, required=("code", "charges"), inside="")
        entry = RunEntry(
            charges=self.charges(given.get("charges")),
            total_volume=self.amount(given.get("total_volume"), "total_volume"),
            temperature=self.amount(given.get("temperature"), "temperature"),
            sections=self.sections(given.get("sections")),
            **{name: self.text(given.get(name), name, name) for name in TEXTS},
        )
        if self.problems:
            raise InvalidInput(self.problems)
        return entry

    def named(
        self,
        value: object,
        where: str,
        known: Sequence[str],
        *,
        required: Sequence[str] = (),
        inside: str | None = None,
    ) -> Mapping[str, Any]:
        """A mapping of known names; anything else is a problem and reads as empty."""
        if not isinstance(value, Mapping):
            self.wrong(f"{shortened(value)} is not a set of named values", where, ", ".join(known))
            return {}
        path = where if inside is None else inside
        for name in value:
            if name not in known:
                place = ".".join(part for part in (path, str(name)[: LONGEST["code"]]) if part)
                self.wrong(f"unknown entry {shortened(name)}", place, ", ".join(known))
        for name in required:
            if value.get(name) is None:
                self.wrong("an entry is missing", f"{path}.{name}" if path else name, "give it")
        return {name: value[name] for name in known if name in value}

    def charges(self, value: object) -> tuple[ChargeEntry, ...]:
        if value is None:
            return ()
        if not isinstance(value, Sequence) or isinstance(value, str | bytes):
            self.wrong(f"{shortened(value)} is not a list", "charges", "a list of charges")
            return ()
        if len(value) > MOST_CHARGES:
            self.wrong(f"{len(value)} charges are too many", "charges", f"at most {MOST_CHARGES}")
            return ()
        found = (self.charge(charge, f"charges.{i}") for i, charge in enumerate(value, start=1))
        return tuple(charge for charge in found if charge is not None)

    def charge(self, value: object, where: str) -> ChargeEntry | None:
        given = self.named(value, where, (*SOURCES, "amount", "note"))
        if not isinstance(value, Mapping):
            return None
        sources = {name: self.text(given.get(name), f"{where}.{name}", "source") or None for name in SOURCES}
        note = self.text(given.get("note"), f"{where}.note", "note")
        amount = self.amount(given.get("amount"), f"{where}.amount")
        if given.get("amount") is None:
            self.wrong("an entry is missing", f"{where}.amount", "a number with a unit")
        return None if amount is None else ChargeEntry(amount, note=note, **sources)

    def amount(self, value: object, where: str) -> Amount | None:
        if value is None:
            return None
        before = len(self.problems)
        given = self.named(value, where, ("value", "unit", "uncertainty"), required=("value", "unit"))
        number = self.number(given.get("value"), f"{where}.value")
        uncertainty = self.number(given.get("uncertainty"), f"{where}.uncertainty")
        unit = given.get("unit")
        if unit is not None and (not isinstance(unit, str) or len(unit) > LONGEST_UNIT):
            self.wrong(f"{shortened(unit)} is no unit", f"{where}.unit", "for example mg, uL, mmol, degC")
        return Amount(number, str(unit), uncertainty) if len(self.problems) == before else None

    def number(self, value: object, where: str) -> float:
        if value is None:
            return 0.0
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.wrong(f"{shortened(value)} is not a number", where, "a number, for example 12.3")
            return 0.0
        try:
            if math.isfinite(float(value)):
                return value if abs(value) < MAX_INTEGER else float(value)
        except OverflowError:
            pass
        self.wrong("the number is too large or not finite", where, "a finite number")
        return 0.0

    def text(self, value: object, where: str, kind: str) -> str:
        if value is None:
            return ""
        try:
            return plain_text(value, field=where, longest=LONGEST[kind], lines=kind in WITH_LINES)
        except InvalidInput as error:
            self.problems += error.problems
            return ""

    def sections(self, value: object) -> dict[str, dict[str, Any]]:
        if value is None:
            return {}
        found: dict[str, dict[str, Any]] = {}
        for section, entries in self.named(value, "sections", tuple(SECTIONS)).items():
            if entries is None:
                continue
            known, where = SECTIONS[section], f"sections.{section}"
            found[section] = {
                key: self.text(entry, f"{where}.{key}", "section")
                if known[key] == "text"
                else self.amount(entry, f"{where}.{key}")
                for key, entry in self.named(entries, where, tuple(known)).items()
                if entry is not None
            }
        return found

    def wrong(self, message: str, field: str | None, cure: str) -> None:
        self.problems.append(Problem(message, field=field, cure=cure))
