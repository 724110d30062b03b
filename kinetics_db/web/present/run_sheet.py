"""One run as its page shows it: what was weighed and what it came to, sections, tables drawn."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import TYPE_CHECKING, Any

from kinetics_db.runs.selectors import start_concentrations
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.charts import Chart, concentrations, positions_of
from kinetics_db.web.present.runs import temperature_of, units_of, words_of
from kinetics_db.web.present.units import Units, factor

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable
    from kinetics_db.runs.models import RunCharge
    from kinetics_db.runs.selectors import RunSheet

SMALL, LARGE = 1e-3, 1.0


@dataclass(frozen=True)
class ChargeLine:
    """One charge: its source and revision, the amount as typed, and what it brought in of each compound."""

    order: int
    kind: str
    name: str
    revision: str
    amount: Shown
    note: str
    brought: Sequence[tuple[str, Shown, Shown]]
    """compound, amount of substance, concentration"""


@dataclass(frozen=True)
class RunPage:
    """What a run's page shows of the run and its tables."""

    started: datetime | None
    temperature: Shown | None
    volume: Shown | None
    assumed_additive: bool
    words: Sequence[str]
    charges: Sequence[ChargeLine]
    starts: Sequence[tuple[str, Shown]]
    sections: Sequence[tuple[str, Sequence[tuple[str, Shown]]]]
    content: Mapping[str, Any]
    charts: Sequence[tuple[ConcentrationTable, Chart]]
    """tables that no other one supersedes, drawn"""


def run_page(sheet: RunSheet, tables: Sequence[ConcentrationTable]) -> RunPage:
    """The page of a revision, with the run's tables newest first."""
    content = sheet.revision.content
    current = [(record, record.table) for record in tables if not hasattr(record, "superseded_by")]
    units = units_of([sheet.revision], current)
    starts = start_concentrations(content)
    columns = (name for _, table in current for name in table.names("concentration"))
    positions = positions_of(columns)
    charts = [
        (
            record,
            concentrations(
                table,
                basis=record.basis,
                title=f"Table {record.number}: concentrations over time",
                name=f"{sheet.run.code}-table-{record.number}",
                units=units,
                positions=positions,
            ),
        )
        for record, table in current
    ]
    volume = content["volume"]
    return RunPage(
        started=datetime.fromisoformat(content["started"]) if content["started"] else None,
        temperature=temperature_of(content),
        volume=None if volume is None else volume_shown(volume["value"], volume["u"]),
        assumed_additive=bool(volume and volume["assumed_additive"]),
        words=words_of(content),
        charges=_charges(content, sheet.charges, units),
        starts=[
            (p.compound, start_shown(p.value, p.standard_uncertainty, content["basis"], units))
            for p in starts
        ],
        sections=[
            (section, [(key, _entry(value)) for key, value in entries.items()])
            for section, entries in content["sections"].items()
        ],
        content=content,
        charts=charts,
    )


def start_shown(value: float, spread: float, basis: str, units: Units) -> Shown:
    """A start concentration (mol/L, or percent for a relative basis) in the page's unit."""
    unit = units.concentration_of(basis)
    scale = factor("mol/L", unit) if basis == "mol/L" else 1.0
    return shown(value * scale, spread * scale, unit)


def volume_shown(litres: float, spread: float) -> Shown:
    """A volume in the unit that a bench would use."""
    unit = "L" if litres >= LARGE else "mL" if litres >= SMALL else "µL"
    scale = factor("L", unit)
    return shown(litres * scale, spread * scale, unit)


def _charges(content: Mapping[str, Any], charges: Sequence[RunCharge], units: Units) -> list[ChargeLine]:
    lines = []
    for order, (entered, charge) in enumerate(
        zip(content["entered"]["charges"], charges, strict=True), start=1
    ):
        kind = "stock" if entered["stock"] else "lot" if entered["lot"] else "compound"
        record = charge.stock_revision or charge.lot_revision or charge.compound_revision
        assert record is not None
        amount = entered["amount"]
        lines.append(
            ChargeLine(
                order=order,
                kind=kind,
                name=entered["name"],
                revision=f"r{record.number}",
                amount=shown(amount["value"], amount["u"], amount["unit"], digits=15),
                note=entered["note"],
                brought=[
                    _brought(part, content["basis"], units)
                    for part in content["start"]
                    if part["label"] == f"charge {order}"
                ],
            )
        )
    return lines


def _brought(part: Mapping[str, Any], basis: str, units: Units) -> tuple[str, Shown, Shown]:
    amount = part["amount"]
    substance = Shown("")
    if amount is not None:
        unit = "mol" if amount >= 1 else "mmol" if amount >= 1e-3 else "µmol"
        substance = shown(amount * factor("mol", unit), unit=unit)
    return part["compound"], substance, start_shown(part["concentration"], 0.0, basis, units)


def _entry(value: Any) -> Shown:
    if isinstance(value, str):
        return Shown(value)
    entered = value["entered"]
    return shown(entered["value"], entered["u"], entered["unit"], digits=15)
