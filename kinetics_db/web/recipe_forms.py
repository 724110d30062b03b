"""Forms of recipes that turn signals into concentrations: one for each kind, with a row for each signal."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Any

from django import forms
from django.http import QueryDict

from kinetics_db.engine.recipes import AsReported, InternalStandard
from kinetics_db.engine.tables import Column, Table
from kinetics_db.engine.units import convert, kind_of_unit
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.web.forms import PlainForm, problem_words
from kinetics_db.web.typed import number_text, number_typed

MOST_ROWS = 60
"""Signals beyond this have no row; a file with more is read again without those that are not needed."""
KINDS = (
    (InternalStandard.kind, "against an internal standard"),
    (AsReported.kind, "as the file reports them"),
)
_INDEXED = re.compile(r"(?:signals|columns)\[(\d+)\]\.(\w+)", re.ASCII)
_QUOTED = re.compile(r"'([^']*)'")
_NOT_STATED = re.compile(r"'\w+' is not stated")
FRACTION = "a fraction such as 0.01, or 1 %"


class Number(forms.CharField):
    """A number as text; ``fraction`` ones may be typed in percent. `plain` turns it into the recipe's number."""

    def __init__(self, label: str, *, fraction: bool = False, whole: bool = False, **more: Any):
        super().__init__(label=label, required=False, max_length=200, **more)
        self.fraction, self.whole = fraction, whole
        self.widget.attrs.update({"class": "short", "inputmode": "decimal", "autocomplete": "off"})

    def plain(self, text: str, *, field: str) -> float | int | None:
        """The number, None for nothing; InvalidInput where it is none."""
        if not text:
            return None
        percent = self.fraction and text.endswith("%")
        given = text.removesuffix("%").strip() if percent else text
        value = number_typed(given, field=field, **({"cure": FRACTION} if self.fraction else {}))
        if percent:
            return value / 100
        return int(value) if self.whole and value.is_integer() else value


class _Part(PlainForm):
    """A form whose fields are the entries of a recipe, or of one of its parts."""

    def plain(self) -> dict[str, Any]:
        """What was filled in, as plain values; a number that is none is shown at its field."""
        found: dict[str, Any] = {}
        for name, field in self.fields.items():
            if name not in self.cleaned_data:
                continue
            text = (self.cleaned_data.get(name) or "").strip()
            if isinstance(field, Number):
                try:
                    found[name] = field.plain(text, field=name)
                except InvalidInput as error:
                    self.add_error(name, problem_words(error.problems[0]))
            else:
                found[name] = text
        return {name: value for name, value in found.items() if value not in (None, "")}


class _Select(forms.ChoiceField):
    def valid_value(self, value: object) -> bool:
        return True


class StandardForm(_Part):
    """What holds for the whole reduction against an internal standard."""

    name = forms.CharField(label="Name of this reduction", required=False)
    standard_signal = _Select(label="Signal of the standard", required=False)
    standard_species = forms.CharField(label="What the standard is", required=False)
    standard_nuclei = Number("Nuclei behind its signal")
    standard_concentration = Number("Concentration in the vessel")
    standard_unit = forms.CharField(label="Unit", required=False)
    standard_relative_u = Number(
        "Its relative uncertainty", fraction=True, help_text="One standard uncertainty: 0.01 or 1 %"
    )
    standard_owner = forms.CharField(
        label="Whose error that is",
        required=False,
        help_text="Such as 'stock 3': tables with the same owner are wrong together.",
    )
    noise_absolute = Number(
        "Noise of every signal, in its unit", help_text="Left open with the next: estimated."
    )
    noise_relative = Number("Noise as a fraction of the signal", fraction=True)
    standard_noise = Number("Noise of the standard's signal, if it differs")
    repetition_time = Number("Repetition time / s", help_text="Open: saturation is not corrected.")
    flip_angle = Number("Flip angle / degrees")
    standard_t1 = Number("T1 of the standard / s")
    standard_t1_u = Number("Its uncertainty / s")
    standard_saturation_relative_u = Number("Or: relative uncertainty by saturation", fraction=True)
    draws = Number("Draws for weak signals", whole=True)
    seed = Number("Seed of the draws", whole=True)

    kind = InternalStandard.kind

    @staticmethod
    def initial_of(recipe: Mapping[str, Any]) -> dict[str, str]:
        """What the form shows for a stored recipe."""
        shown = {name: _shown(recipe.get(name)) for name in _OWN}
        shown["standard_unit"] = "mol/L"
        standard = recipe.get("standard", {})
        return shown | {f"standard_{name}": _shown(standard.get(name) or None) for name in _STANDARD}

    def recipe(self, rows: Sequence[dict[str, Any]]) -> dict[str, Any]:
        """The recipe in plain values."""
        given = self.plain()
        given.pop("name", None)
        unit = given.pop("standard_unit", "mol/L")
        if "standard_concentration" in given:
            given["standard_concentration"] = self._molar(given["standard_concentration"], unit)
        standard = {name: given.pop(f"standard_{name}") for name in _STANDARD if f"standard_{name}" in given}
        return {"kind": self.kind, **given, "standard": standard, "signals": list(rows)}

    def _molar(self, value: float, unit: str) -> float:
        try:
            if kind_of_unit(unit) == "concentration":
                return float(convert(value, unit, "mol/L"))
            wrong = f"'{unit[:40]}' is no unit of concentration"
        except InvalidInput as error:
            wrong = problem_words(error.problems[0])
        self.add_error("standard_unit", f"{wrong} (write mol/L or mM)")
        return value


_OWN = (
    "standard_concentration", "standard_relative_u", "standard_owner", "noise_absolute", "noise_relative",
    "repetition_time", "flip_angle", "draws", "seed",
)  # fmt: skip
_STANDARD = ("signal", "species", "nuclei", "noise", "t1", "t1_u", "saturation_relative_u")


class SignalRow(_Part):
    """One signal measured against the standard; without a species it is left aside."""

    species = forms.CharField(label="species", required=False)
    nuclei = Number("nuclei")
    response_factor = Number("response factor")
    response_relative_u = Number("its relative u", fraction=True)
    noise = Number("noise")
    t1 = Number("T1 / s")
    t1_u = Number("u(T1) / s")
    saturation_relative_u = Number("or relative u by saturation", fraction=True)


class ReportedForm(_Part):
    """What holds for all columns that hold concentrations already."""

    name = forms.CharField(label="Name of this reduction", required=False)
    constant_u = Number(
        "Standard uncertainty of every value",
        help_text="In the unit of its column. Both left open, and no column of uncertainties: a fit estimates it.",
    )
    relative_u = Number("Relative standard uncertainty", fraction=True)
    scale_relative_u = Number(
        "Relative uncertainty common to all values",
        fraction=True,
        help_text="Of a calibration, for instance: all values are wrong by the same factor.",
    )
    scale_owner = forms.CharField(label="Whose error that is", required=False)

    kind = AsReported.kind

    @staticmethod
    def initial_of(recipe: Mapping[str, Any]) -> dict[str, str]:
        """What the form shows for a stored recipe."""
        return {
            name: _shown(recipe.get(name))
            for name in ("constant_u", "relative_u", "scale_relative_u", "scale_owner")
        }

    def recipe(self, rows: Sequence[dict[str, Any]]) -> dict[str, Any]:
        """The recipe in plain values."""
        given = self.plain()
        given.pop("name", None)
        return {"kind": self.kind, **given, "columns": list(rows)}


class ReportedRow(_Part):
    """One column that is taken as it is; without a species it is left aside."""

    species = forms.CharField(label="species", required=False)
    unit = forms.CharField(label="unit, if stated otherwise", required=False)
    uncertainty_signal = _Select(label="column of its uncertainties", required=False)


class RecipeForms:
    """The form of one kind with its rows; ``data`` is what came in, else ``recipe`` and ``name`` fill it.

    While it is still being filled in (``live``) a field that is empty is not wrong: it is counted as ``open``.
    """

    def __init__(
        self,
        kind: str,
        signals: Table,
        *,
        data: QueryDict | None = None,
        recipe: Mapping[str, Any] | None = None,
        name: str = "",
        live: bool = False,
    ):
        self.kind = kind
        self.standard = kind == InternalStandard.kind
        self.columns = [column for column in signals.columns if column.quantity == "signal"]
        top = StandardForm if self.standard else ReportedForm
        row = SignalRow if self.standard else ReportedRow
        fill = recipe or {}
        self.top = top(data if data is not None else {**top.initial_of(fill), "name": name})
        parts = {part["signal"]: part for part in fill.get("signals" if self.standard else "columns", ())}
        self.rows = [
            (
                column,
                row(
                    data if data is not None else _row_data(i, parts.get(column.name, {}), row),
                    prefix=f"row-{i}",
                ),
            )
            for i, column in enumerate(self.columns[:MOST_ROWS])
        ]
        self.live = live
        self.row_problems: list[str] = []
        self.open: list[str] = []
        self._choices()

    def _choices(self) -> None:
        names = [("", "–"), *((column.name, _with_unit(column)) for column in self.columns)]
        if self.standard:
            _offer(self.top, "standard_signal", names)
            self.top.fields["standard_unit"].widget.attrs["class"] = "unit"
        for _, row in self.rows:
            row.fields["species"].widget.attrs.update(
                {"list": "species-known", "class": "short", "autocomplete": "off"}
            )
            if not self.standard:
                _offer(row, "uncertainty_signal", names)
                row.fields["unit"].widget.attrs["class"] = "unit"

    @property
    def more(self) -> int:
        """Signals without a row."""
        return max(0, len(self.columns) - MOST_ROWS)

    @property
    def used(self) -> list[tuple[Column, _Part]]:
        """Rows that name a species, in the order in which the recipe counts them."""
        return [(column, row) for column, row in self.rows if (row["species"].value() or "").strip()]

    def recipe(self) -> dict[str, Any] | None:
        """The recipe as it is filled in; None when a number is none, which is shown at its field then."""
        valid = [form.is_valid() for form in (self.top, *(row for _, row in self.rows))]  # each shows its own
        if not all(valid):
            return None
        parts = [{"signal": column.name, **row.plain()} for column, row in self.used]
        recipe = self.top.recipe(parts)
        return None if self.is_wrong else recipe

    @property
    def is_wrong(self) -> bool:
        """Whether anything is shown that has to be corrected; what is only open does not count."""
        return bool(self.top.errors or self.row_problems or any(row.errors for _, row in self.rows))

    def show(self, error: InvalidInput) -> None:
        """Put each problem at its field: in the row that it counts or names, at the top, or above the rows."""
        for problem in error.problems:
            self._place(problem)

    def _place(self, problem: Problem) -> None:
        words, where = problem_words(problem)[:600], problem.field or ""
        if found := _INDEXED.fullmatch(where):
            self._put(*self.used[int(found[1])], found[2], words)
            return
        top = where.replace("standard.", "standard_")
        if top in self.top.fields:
            self._put(None, self.top, top, words)
            return
        last = where.rpartition(".")[2]
        named = set(_QUOTED.findall(problem.message))
        placed = False
        for column, row in self.used:
            if named & {column.name, (row["species"].value() or "").strip()}:
                self._put(column, row, last if last in row.fields else "species", words)
                placed = True
        if self.standard and named & {self.top[f"standard_{own}"].value() for own in ("signal", "species")}:
            own = f"standard_{last}"
            self._put(None, self.top, own if own in self.top.fields else "standard_signal", words)
            placed = True
        if not placed and self.live and not self.used:
            self.open.append("a species for at least one signal")
        elif not placed:
            self.row_problems.append(words)

    def _put(self, column: Column | None, form: _Part, field: str, words: str) -> None:
        """Show a problem at a field; one that is only empty counts as open, or is called so."""
        if field not in form.fields:
            form.add_error(None, words)
            return
        bound = form[field]
        empty = not (bound.value() or "").strip()
        if empty and self.live and "is not stated" in words:
            self.open.append(f"{bound.label} of {column.name}" if column else str(bound.label))
        elif empty and _NOT_STATED.match(words):
            form.add_error(field, "It is not stated yet")
        else:
            form.add_error(field, words)


def _offer(form: PlainForm, field: str, choices: list[tuple[str, str]]) -> None:
    select = form.fields[field]
    assert isinstance(select, forms.ChoiceField)
    select.choices = choices


def _row_data(number: int, part: Mapping[str, Any], row: type[_Part]) -> dict[str, str]:
    return {f"row-{number}-{name}": _shown(part.get(name) or None) for name in row.base_fields}


def _with_unit(column: Column) -> str:
    return f"{column.name} ({column.unit})" if column.unit else column.name


def _shown(value: Any) -> str:
    if value is None or isinstance(value, bool):
        return ""
    return number_text(value) if isinstance(value, int | float) else str(value)
