"""Compounds, lots and stocks as the materials page shows them."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.units import factor, units_for

if TYPE_CHECKING:
    from kinetics_db.materials.models import CompoundRevision, LotRevision, StockRevision


@dataclass(frozen=True)
class CompoundLine:
    """One compound."""

    revision: CompoundRevision
    name: str
    formula: str
    molar_mass: Shown | None
    density: Shown | None
    hazards: Sequence[str]


@dataclass(frozen=True)
class LotLine:
    """One bottle."""

    revision: LotRevision
    code: str
    compound: str
    purity: Shown
    note: str


@dataclass(frozen=True)
class StockLine:
    """One stock solution with its concentrations."""

    revision: StockRevision
    code: str
    composition: Sequence[tuple[str, Shown]]
    solvent: str
    made_on: str


def compound_line(revision: CompoundRevision) -> CompoundLine:
    """The newest revision of a compound."""
    content = revision.content
    mass, density = content["molar_mass"], content["density"]
    return CompoundLine(
        revision,
        content["name"],
        content["formula"],
        None if mass is None else shown(mass, unit="g/mol", digits=7),
        None if density is None else shown(density * factor("g/L", "g/mL"), unit="g/mL", digits=6),
        content["hazard_statements"],
    )


def lot_line(revision: LotRevision) -> LotLine:
    """The newest revision of a lot."""
    content = revision.content
    return LotLine(
        revision,
        content["code"],
        revision.lot.compound.name,
        shown(content["purity"], content["purity_u"], digits=6),
        content["supplier_note"],
    )


def stock_line(revision: StockRevision) -> StockLine:
    """The newest revision of a stock."""
    content = revision.content
    components = content["components"]
    units = units_for(concentrations=(part["concentration"] for part in components), durations=())
    return StockLine(
        revision,
        content["code"],
        [(part["compound"], _concentration(part, units.concentration)) for part in components],
        content["solvent"],
        content["made_on"],
    )


def _concentration(part: Mapping[str, Any], unit: str) -> Shown:
    """With the standard uncertainty of all its causes together."""
    value = part["concentration"] * factor("mol/L", unit)
    return shown(value, value * math.hypot(*(cause["relative_u"] for cause in part["shared"])), unit)
