"""What a person enters for a run, before anything is resolved or converted."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

ControlKind = Literal[
    "", "without light", "without catalyst", "without reagent", "without substrate", "blank", "added product"
]
CONTROL_KINDS: tuple[str, ...] = ControlKind.__args__  # type: ignore[attr-defined]


MOST_CHARGES = 200
#: Longest texts of an entry, in characters; those that may hold line breaks are `WITH_LINES`.
LONGEST: Mapping[str, int] = {
    "code": 80,
    "atmosphere": 200,
    "started": 40,
    "replicate_of": 80,
    "control_kind": 80,
    "notes": 100_000,
    "source": 80,
    "note": 1000,
    "section": 2000,
}
WITH_LINES = frozenset({"notes", "note", "section"})


@dataclass(frozen=True)
class Amount:
    """A number as typed, with its unit and standard uncertainty in the same unit."""

    value: float
    unit: str
    uncertainty: float = 0.0


@dataclass(frozen=True)
class ChargeEntry:
    """Something put into the vessel: exactly one of compound (name), lot (code) and stock (code)."""

    amount: Amount
    compound: str | None = None
    lot: str | None = None
    stock: str | None = None
    note: str = ""


#: The rest of what a run can hold: section -> (field -> kind of value). 'amount' is a number with a unit of the
#: stated kind; sections may be left out, unknown ones are refused. Later parts of the engine read them.
SECTIONS: Mapping[str, Mapping[str, str]] = {
    "vessel": {"name": "text", "material": "text", "stirring": "text", "path": "length"},
    "solvent": {"mixture": "text", "water content": "text", "degassing": "text", "expansion": "text"},
    "headspace": {
        "gas": "text",
        "volume": "volume",
        "pressure": "pressure",
        "henry": "text",
        "k_L a": "text",
    },
    "catalyst": {"batch": "text", "preactivation": "text"},
    "sampling": {"mode": "text", "quench": "text", "work-up": "text", "sample volume": "volume"},
    "clock": {"zero": "text", "first contact": "time", "instrument offset": "time", "lamp offset": "time"},
    "thermometer": {"name": "text", "calibration": "text", "lag": "time"},
    "lamp": {
        "serial": "text",
        "hours": "text",
        "warm-up": "time",
        "distance": "length",
        "actinometry": "text",
    },
    "evaporation": {"note": "text"},
}


@dataclass(frozen=True)
class RunEntry:
    """A run as entered: charges in order of addition, volume, temperature, what it repeats or controls for."""

    code: str
    charges: Sequence[ChargeEntry]
    total_volume: Amount | None = None
    temperature: Amount | None = None
    atmosphere: str = ""
    started: str = ""
    """ISO date and time of zero, with zone; empty when not known"""
    replicate_of: str = ""
    control_kind: str = ""
    notes: str = ""
    sections: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
