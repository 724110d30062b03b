"""The form of a run: what it holds for an entry, and the entry that was typed into it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from django import forms
from django.http import QueryDict
from django.utils import timezone

from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.runs.entry import CONTROL_KINDS, SECTIONS, Amount, ChargeEntry, RunEntry
from kinetics_db.web.forms import PlainForm
from kinetics_db.web.rows import RowForm, Rows
from kinetics_db.web.typed import number_text, number_typed

SOURCES = ("compound", "lot", "stock")
AMOUNTS = {"temperature": "temperature", "total_volume": "volume"}
"""Amounts of an entry -> how their fields begin."""
TEXTS = ("started", "atmosphere", "replicate_of", "control_kind", "notes")
TEXT_SHAPE = {"rows": 1}
EXAMPLES = {"time": "s, min", "volume": "mL", "pressure": "bar", "length": "cm"}


def _line(label: str, hint: str = "", **attributes: Any) -> forms.CharField:
    return forms.CharField(
        label=label,
        help_text=hint,
        required=False,
        widget=forms.TextInput({"autocomplete": "off", **attributes}),
    )


def _amount_fields(
    name: str, label: str, *, unit: str = "", example: str = "", hint: str = ""
) -> dict[str, Any]:
    """Value, unit and standard uncertainty, as three fields with one beginning."""
    return {
        f"{name}_value": _line(label, hint, inputmode="decimal", **{"class": "short"}),
        f"{name}_unit": forms.CharField(
            label="Unit",
            required=False,
            initial=unit,
            widget=forms.TextInput({"class": "unit", "autocomplete": "off", "placeholder": example or unit}),
        ),
        f"{name}_uncertainty": _line("± standard uncertainty", inputmode="decimal", **{"class": "short"}),
    }


def section_field(section: str, key: str) -> str:
    """How the field (or the beginning of the three fields) of a section's entry is called."""
    return f"{section}-{key}".replace(" ", "_")


class ChargeForm(RowForm):
    """One charge as it was weighed or pipetted."""

    silent = frozenset({"kind", "was", "unit"})

    was = forms.CharField(required=False, widget=forms.HiddenInput)
    kind = forms.CharField(
        label="What",
        required=False,
        initial="compound",
        widget=forms.Select(choices=[(kind, kind) for kind in SOURCES]),
    )
    source = _line("Name or code")
    amount = _line("Amount", inputmode="decimal")
    unit = _line("Unit", list="units-of-charges")
    uncertainty = _line("± uncertainty", inputmode="decimal")
    note = _line("Note")

    def __init__(self, *args: Any, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.place = str(self.prefix).rpartition("-")[2]
        kind = self.typed["kind"]
        self.fields["source"].widget.attrs["list"] = f"{kind if kind in SOURCES else 'compound'}-names"
        self.changes: list[str] = []
        self.missing = ""
        """address for entering what is named here and not known"""

    @property
    def cells(self) -> list[forms.BoundField]:
        """The fields that are seen."""
        return [self[name] for name in self.fields if name != "was"]

    @property
    def wrong(self) -> list[str]:
        """All that is wrong with the row."""
        return [str(error) for errors in self.errors.values() for error in errors]


class RunForm(PlainForm):
    """Everything of a run but its charges."""

    code = _line("Code", "How you call the run, once in the project.", maxlength=80)
    started = _line(
        "Started",
        "Date and time of zero, for example 2026-03-05 09:30. Without a zone it is in yours.",
        placeholder="2026-03-05 09:30",
    )
    atmosphere = _line("Atmosphere", placeholder="argon, air ...")
    control_kind = forms.CharField(
        label="Control",
        required=False,
        widget=forms.Select(choices=[(kind, kind or "no control") for kind in CONTROL_KINDS]),
    )
    replicate_of = _line("Replicate of", "Code of the run that this one repeats; leave empty for none.")
    notes = forms.CharField(label="Notes", required=False, widget=forms.Textarea({"rows": 4}))
    against = forms.CharField(required=False, widget=forms.HiddenInput)
    based_on = forms.CharField(required=False, widget=forms.HiddenInput)
    reason = _line("Reason for the revision", maxlength=1000)

    def __init__(self, *args: Any, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.fields.update(_amount_fields("temperature", "Temperature", unit="degC"))
        self.fields.update(
            _amount_fields(
                "volume",
                "Total volume",
                unit="mL",
            )
        )
        for section, entries in SECTIONS.items():
            for key, kind in entries.items():
                name = section_field(section, key)
                if kind == "text":
                    widget = forms.Textarea(TEXT_SHAPE)
                    self.fields[name] = forms.CharField(label=key.capitalize(), required=False, widget=widget)
                else:
                    self.fields.update(_amount_fields(name, key.capitalize(), example=EXAMPLES[kind]))

    def typed(self, name: str) -> str:
        """What stands in a field now, line breaks as the record writes them."""
        value = self[name].value()
        return "" if value is None else str(value).replace("\r\n", "\n")

    @property
    def temperature(self) -> list[forms.BoundField]:
        return self._three("temperature")

    @property
    def volume(self) -> list[forms.BoundField]:
        return self._three("volume")

    def _three(self, name: str) -> list[forms.BoundField]:
        return [self[f"{name}_{part}"] for part in ("value", "unit", "uncertainty")]

    @property
    def sections(self) -> Iterator[SectionFields]:
        """The sections with their fields, open where something stands in them or is wrong."""
        for section, entries in SECTIONS.items():
            rows = []
            for key, kind in entries.items():
                name = section_field(section, key)
                rows.append([self[name]] if kind == "text" else self._three(name))
            every = [one for row in rows for one in row]
            yield SectionFields(
                section, rows, is_open=any(one.errors or self.typed(one.name).strip() for one in every)
            )


@dataclass(frozen=True)
class SectionFields:
    """A section of the form: a row of fields for each of its entries."""

    name: str
    rows: Sequence[Sequence[forms.BoundField]]
    is_open: bool


@dataclass
class Typed:
    """The entry that can be read from a form, and what cannot.

    ``forms`` are the rows of the entry's charges, so that 'charges.2' of a service finds its row.
    """

    entry: RunEntry
    forms: list[ChargeForm]
    problems: list[tuple[PlainForm, Problem]] = field(default_factory=list)


def charges_of(data: QueryDict | None, *, initial: Sequence[Mapping[str, str]] = ()) -> Rows[ChargeForm]:
    """The rows of charges: as sent, or as they begin."""
    return Rows(ChargeForm, "charges", data=data, initial=initial)


def initial_of(entry: RunEntry) -> tuple[dict[str, str], list[dict[str, str]]]:
    """What the form and its rows begin with, so that reading it back gives the same entry."""
    values = {name: str(getattr(entry, name)) for name in ("code", *TEXTS)}
    for name, beginning in AMOUNTS.items():
        values |= _amount_values(beginning, getattr(entry, name))
    for section, entries in entry.sections.items():
        for key, value in entries.items():
            name = section_field(section, key)
            values |= _amount_values(name, value) if isinstance(value, Amount) else {name: value}
    rows = []
    for number, charge in enumerate(entry.charges, start=1):
        kind = next((kind for kind in SOURCES if getattr(charge, kind)), "compound")
        rows.append(
            {
                "was": str(number),
                "kind": kind,
                "source": getattr(charge, kind) or "",
                "amount": number_text(charge.amount.value),
                "unit": charge.amount.unit,
                "uncertainty": _spread(charge.amount.uncertainty),
                "note": charge.note,
            }
        )
    return values, rows


def _amount_values(name: str, amount: Amount | None) -> dict[str, str]:
    if amount is None:
        return {f"{name}_value": "", f"{name}_uncertainty": ""}
    return {
        f"{name}_value": number_text(amount.value),
        f"{name}_unit": amount.unit,
        f"{name}_uncertainty": _spread(amount.uncertainty),
    }


def _spread(uncertainty: float) -> str:
    return number_text(uncertainty) if uncertainty else ""


def mark_changes(
    form: RunForm,
    charges: Rows[ChargeForm],
    values: Mapping[str, str],
    rows: Sequence[Mapping[str, str]],
    *,
    but: Sequence[str],
) -> list[str]:
    """Say at each field and row what was there before (of `initial_of`); gives the charges that were taken out.

    ``but`` names fields that are not compared.
    """
    for name in form.fields:
        before = values.get(name, "" if name.endswith("_value") else None)
        if name in (*but, "reason", "against", "based_on") or before is None:
            continue
        if not _same(form.typed(name), before):
            field = form[name]
            field.label = f"{field.label} (changed, was {_quoted(before)})"
    kept = set()
    for row in charges.forms:
        was = row.typed["was"]
        if not was.isdecimal() or not 1 <= int(was[:4]) <= len(rows):
            row.changes = ["added"] if row.is_filled else []
            continue
        before_row = rows[int(was[:4]) - 1]
        kept.add(int(was[:4]))
        row.changes = [
            f"{str(cell.label).lower()} was {_quoted(before_row[cell.name])}"
            for cell in row.cells
            if not _same(row.typed[cell.name], before_row[cell.name])
        ]
    return [
        f"{row['kind']} {row['source']}, {row['amount']} {row['unit']}"
        for number, row in enumerate(rows, start=1)
        if number not in kept
    ]


def _same(now: str, before: str) -> bool:
    return now.strip().replace("\r\n", "\n") == before.strip().replace("\r\n", "\n")


def _quoted(text: str) -> str:
    return f"'{text[:40]}…'" if len(text) > 40 else f"'{text}'" if text else "empty"


def read_entry(form: RunForm, charges: Rows[ChargeForm], *, code: str | None = None) -> Typed:
    """The entry as typed. What cannot be read stands in ``problems``, and the entry is without it.

    ``code`` is that of a run which has one already.
    """
    problems: list[tuple[PlainForm, Problem]] = []
    read: list[ChargeEntry] = []
    rows: list[ChargeForm] = []
    for row in charges.filled:
        with _noted(problems, row):
            read.append(_charge(row))
            rows.append(row)
    sections: dict[str, dict[str, Any]] = {}
    for section, entries in SECTIONS.items():
        for key, kind in entries.items():
            name = section_field(section, key)
            with _noted(problems, form):
                value = form.typed(name) if kind == "text" else _amount(form, name)
                if value:
                    sections.setdefault(section, {})[key] = value
    amounts: dict[str, Amount | None] = {}
    for name, beginning in AMOUNTS.items():
        with _noted(problems, form):
            amounts[name] = _amount(form, beginning)
    texts: dict[str, Any] = {name: form.typed(name) for name in TEXTS}
    texts["started"] = with_zone(texts["started"])
    entry = RunEntry(
        code=form.typed("code") if code is None else code,
        charges=read,
        sections=sections,
        temperature=amounts.get("temperature"),
        total_volume=amounts.get("total_volume"),
        **texts,
    )
    return Typed(entry, rows, problems)


def with_zone(text: str) -> str:
    """A date and time without a zone gets the person's own; any other text stays as it is."""
    try:
        moment = datetime.fromisoformat(text.strip())
        if moment.tzinfo is None and len(text.strip()) > len("2026-03-05"):
            return timezone.make_aware(moment).isoformat()
    except (ValueError, OverflowError):
        pass
    return text


@contextmanager
def _noted(problems: list[tuple[PlainForm, Problem]], form: PlainForm) -> Iterator[None]:
    try:
        yield
    except InvalidInput as error:
        problems += [(form, problem) for problem in error.problems]


def _charge(row: ChargeForm) -> ChargeEntry:
    typed = row.typed
    kind, source = typed["kind"], typed["source"].strip()
    if kind not in SOURCES:
        raise InvalidInput(f"'{kind[:24]}' is no kind of source", field="kind", cure=", ".join(SOURCES))
    if not source:
        raise InvalidInput(
            "what was put in is not named", field="source", cure=f"the name or code of a {kind}"
        )
    value = number_typed(typed["amount"], field="amount")
    spread = number_typed(typed["uncertainty"] or "0", field="uncertainty")
    if not typed["unit"].strip():
        raise InvalidInput("a unit is missing", field="unit", cure="for example mg, uL, mmol, mmol/L")
    return ChargeEntry(Amount(value, typed["unit"].strip(), spread), note=typed["note"], **{kind: source})


def _amount(form: RunForm, name: str) -> Amount | None:
    value, unit, spread = (form.typed(f"{name}_{part}").strip() for part in ("value", "unit", "uncertainty"))
    if not value and not spread:
        return None
    number = number_typed(value, field=f"{name}_value")
    uncertainty = number_typed(spread or "0", field=f"{name}_uncertainty")
    if not unit:
        cure = f"for example {form.fields[f'{name}_unit'].widget.attrs['placeholder']}"
        raise InvalidInput("a unit is missing", field=f"{name}_unit", cure=cure)
    return Amount(number, unit, uncertainty)


def _names() -> dict[str, str]:
    """Places that the services name -> fields of the form and of its rows."""
    beginnings = dict(AMOUNTS)
    names = {
        "": "source", "value": "amount", "amount": "amount", "standard_uncertainty": "uncertainty",
        "molar_mass": "source", "density": "source", "compound": "source", "lot": "source", "stock": "source",
    }  # fmt: skip
    for section, entries in SECTIONS.items():
        for key, kind in entries.items():
            place, name = f"sections.{section}.{key}", section_field(section, key)
            if kind == "text":
                names[place] = name
            else:
                beginnings[place] = name
    for place, name in beginnings.items():
        names[place] = names[f"{place}.value"] = names[f"{place}.{place}"] = f"{name}_value"
        names[f"{place}.unit"] = f"{name}_unit"
        names[f"{place}.uncertainty"] = f"{name}_uncertainty"
    return names


NAMES = _names()
