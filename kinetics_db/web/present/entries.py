"""Entries of a run in words: what they come to, and what differs between two, such as a copy and its original."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import zip_longest
from typing import TYPE_CHECKING

from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.web.present.run_sheet import start_shown, volume_shown
from kinetics_db.web.present.units import units_for
from kinetics_db.web.typed import number_text

if TYPE_CHECKING:
    from kinetics_db.runs.services import Preview
    from kinetics_db.web.numbers import Shown

LABELS = {
    "code": "code",
    "started": "started",
    "temperature": "temperature",
    "total_volume": "total volume",
    "atmosphere": "atmosphere",
    "control_kind": "control",
    "replicate_of": "replicate of",
    "notes": "notes",
}
NOTHING = "nothing"


@dataclass(frozen=True)
class Difference:
    """One thing that differs: where it stands, and what stands there in each entry."""

    label: str
    first: str
    second: str


def differences(first: RunEntry, second: RunEntry, *, but: Sequence[str] = ("code",)) -> list[Difference]:
    """Everything that differs, in the order of the form; ``but`` names what is not compared."""
    found = []
    for name, label in LABELS.items():
        if name not in but:
            found.append(Difference(label, _text(getattr(first, name)), _text(getattr(second, name))))
    found += _of_charges(first.charges, second.charges)
    sections = [*first.sections, *(name for name in second.sections if name not in first.sections)]
    for section in sections:
        one, other = first.sections.get(section, {}), second.sections.get(section, {})
        for key in [*one, *(key for key in other if key not in one)]:
            found.append(Difference(f"{section}, {key}", _text(one.get(key)), _text(other.get(key))))
    return [difference for difference in found if difference.first != difference.second]


def _of_charges(first: Sequence[ChargeEntry], second: Sequence[ChargeEntry]) -> Iterator[Difference]:
    """Charges by their order; where one was added or taken out, by what was charged."""
    if [charge_source(c) for c in first] == [charge_source(c) for c in second]:
        pairs: list[tuple[ChargeEntry | None, ChargeEntry | None]] = list(zip_longest(first, second))
    else:
        left, pairs = list(second), []
        for charge in first:
            match = next((c for c in left if charge_source(c) == charge_source(charge)), None)
            if match is not None:
                left.remove(match)
            pairs.append((charge, match))
        pairs += [(None, charge) for charge in left]
        if [c for _, c in pairs if c is not None] != list(second):
            order = (", ".join(charge_source(c) for c in charges) for charges in (first, second))
            yield Difference("order of the charges", *order)
    for one, other in pairs:
        known = one or other
        assert known is not None
        yield Difference(charge_source(known), _charged(one), _charged(other))


def charge_source(charge: ChargeEntry) -> str:
    """What a charge is of: 'lot K-7', 'stock S1', 'compound ester'."""
    kind = "stock" if charge.stock else "lot" if charge.lot else "compound"
    return f"{kind} {charge.stock or charge.lot or charge.compound}"


def amount_text(amount: Amount | None) -> str:
    """An amount as it was typed: '12.3 ± 0.1 mg'."""
    if amount is None:
        return NOTHING
    spread = f" ± {number_text(amount.uncertainty)}" if amount.uncertainty else ""
    return f"{number_text(amount.value)}{spread} {amount.unit}"


def _charged(charge: ChargeEntry | None) -> str:
    if charge is None:
        return NOTHING
    return amount_text(charge.amount) + (f" ({charge.note})" if charge.note else "")


def _text(value: object) -> str:
    if value is None or isinstance(value, Amount):
        return amount_text(value)
    return str(value) or NOTHING


@dataclass(frozen=True)
class AmountsSheet:
    """What the charges typed so far come to.

    ``problems`` say what is still wrong, ``differences`` what has changed against the original called ``against``.
    """

    rows: Sequence[tuple[str, Shown]]
    volume: Shown | None
    assumed_additive: bool
    problems: Sequence[str] = ()
    differences: Sequence[Difference] = ()
    against: str = ""


def amounts_sheet(
    preview: Preview,
    *,
    problems: Sequence[str] = (),
    differences: Sequence[Difference] = (),
    against: str = "",
) -> AmountsSheet:
    """A preview in the units that suit its concentrations."""
    units = units_for(
        concentrations=(p.value for p in preview.starts if preview.basis == "mol/L"), durations=()
    )
    return AmountsSheet(
        rows=[
            (p.compound, start_shown(p.value, p.standard_uncertainty, preview.basis, units))
            for p in preview.starts
        ],
        volume=None if preview.volume is None else volume_shown(preview.volume, preview.volume_u or 0.0),
        assumed_additive=preview.assumed_additive,
        problems=problems,
        differences=differences,
        against=against,
    )
