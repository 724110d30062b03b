"""Forms of compounds, lots and stocks: what they hold for a record, and what was typed into them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from django import forms

from kinetics_db.engine.units import convert
from kinetics_db.errors import InvalidInput
from kinetics_db.materials.services import Portion
from kinetics_db.web.forms import PlainForm
from kinetics_db.web.rows import RowForm
from kinetics_db.web.typed import Numbers, number_text, number_typed

SOURCES = ("lot", "compound")


def line(label: str, hint: str = "", **attributes: Any) -> forms.CharField:
    """A field of one line."""
    widget = forms.TextInput({"autocomplete": "off", **attributes})
    return forms.CharField(label=label, help_text=hint, required=False, widget=widget)


def number(label: str, hint: str = "", **attributes: Any) -> forms.CharField:
    """A short field for a number, which the page reads itself so that its words are clear."""
    return line(label, hint, inputmode="decimal", **{"class": "short", **attributes})


class CompoundForm(PlainForm):
    """A compound. What it is called never changes: lots, charges and mechanisms name it so."""

    name = line("Name", "As charges, tables and mechanisms of the project call it.", maxlength=80)
    formula = line("Formula", maxlength=200)
    molar_mass = number(
        "Molar mass / g/mol",
        "Without it, the compound can be charged by amount (mmol) or concentration, not by mass or volume.",
    )
    density_value = number(
        "Density of the neat substance", "Only needed where the compound itself is measured by volume."
    )
    density_unit = line("Unit of density", placeholder="g/mL", **{"class": "unit"})
    hazard_statements = forms.CharField(
        label="Hazard statements",
        help_text="One a line, for example H225.",
        required=False,
        widget=forms.Textarea({"rows": 3}),
    )
    reason = line("Reason for the revision", maxlength=1000)

    places: Mapping[str, str] = {"density": "density_value", "unit": "density_unit", "value": "density_value"}

    def values(self) -> dict[str, Any]:
        """What `enter_compound` takes; InvalidInput names the fields that cannot be read."""
        typed, numbers = self.cleaned_data, Numbers()
        density = numbers.read(typed["density_value"], field="density_value")
        molar_mass = numbers.read(typed["molar_mass"], field="molar_mass")
        unit = typed["density_unit"].strip()
        if density is not None and not unit:
            numbers.wrong("a unit is missing", field="density_unit", cure="for example g/mL")
        numbers.done()
        return {
            "name": typed["name"],
            "formula": typed["formula"],
            "molar_mass": molar_mass,
            "density": None if density is None else (density, unit),
            "hazard_statements": [h.strip() for h in typed["hazard_statements"].splitlines() if h.strip()],
            "reason": typed["reason"],
        }

    @staticmethod
    def begun(content: Mapping[str, Any]) -> dict[str, str]:
        """What the form begins with for the next revision."""
        return {
            "name": content["name"],
            "formula": content["formula"],
            "molar_mass": number_text(content["molar_mass"]),
            "density_value": number_text(content["density"]),
            "density_unit": "g/L" if content["density"] is not None else "",
            "hazard_statements": "\n".join(content["hazard_statements"]),
        }


class LotForm(PlainForm):
    """A bottle of a compound."""

    code = line("Code", "What stands on the bottle, once in the project.", maxlength=80)
    compound = line("Compound", list="compound-names", maxlength=80)
    purity = number("Purity", "A mass fraction such as 0.985, or 98.5 %. Left empty it is taken as pure.")
    purity_uncertainty = number("± standard uncertainty", "Of the purity, written in the same way.")
    supplier_note = forms.CharField(
        label="Supplier, date, how it was purified", required=False, widget=forms.Textarea({"rows": 2})
    )
    reason = line("Reason for the revision", maxlength=1000)

    places: Mapping[str, str] = {"purity_u": "purity_uncertainty"}

    def values(self) -> dict[str, Any]:
        """What `enter_lot` takes."""
        typed, numbers = self.cleaned_data, Numbers()
        purity = fraction_typed(typed["purity"] or "1", numbers, field="purity")
        spread = fraction_typed(typed["purity_uncertainty"] or "0", numbers, field="purity_uncertainty")
        numbers.done()
        return {
            "code": typed["code"],
            "compound": typed["compound"],
            "purity": purity,
            "purity_uncertainty": spread,
            "supplier_note": typed["supplier_note"].replace("\r\n", "\n"),
            "reason": typed["reason"],
        }

    @staticmethod
    def begun(content: Mapping[str, Any], *, compound: str) -> dict[str, str]:
        """What the form begins with for the next revision."""
        return {
            "code": content["code"],
            "compound": compound,
            "purity": number_text(content["purity"]),
            "purity_uncertainty": number_text(content["purity_u"]) if content["purity_u"] else "",
            "supplier_note": content["supplier_note"],
        }


class PortionForm(RowForm):
    """What goes into a stock."""

    silent = frozenset({"kind"})

    kind = forms.CharField(
        label="What", required=False, initial="lot", widget=forms.Select(choices=[(k, k) for k in SOURCES])
    )
    source = line("Name or code")
    amount = line("Amount", inputmode="decimal")
    unit = line("Unit", list="units-of-charges")
    uncertainty = line("± uncertainty", inputmode="decimal")

    def __init__(self, *args: Any, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.place = str(self.prefix).rpartition("-")[2]
        kind = self.typed["kind"]
        self.fields["source"].widget.attrs["list"] = f"{kind if kind in SOURCES else 'lot'}-names"

    @property
    def cells(self) -> list[forms.BoundField]:
        """The fields in order."""
        return [self[name] for name in self.fields]

    @property
    def wrong(self) -> bool:
        """Whether anything is."""
        return bool(self.errors)

    def portion(self) -> Portion:
        """What was typed; InvalidInput names the field that cannot be read."""
        typed = self.typed
        kind, source = typed["kind"], typed["source"].strip()
        if kind not in SOURCES:
            raise InvalidInput(f"'{kind[:24]}' is no kind of source", field="kind", cure=", ".join(SOURCES))
        if not source:
            raise InvalidInput(
                "what went in is not named", field="source", cure=f"the name or code of a {kind}"
            )
        value = number_typed(typed["amount"], field="amount")
        spread = number_typed(typed["uncertainty"] or "0", field="uncertainty")
        if not typed["unit"].strip():
            raise InvalidInput("a unit is missing", field="unit", cure="for example mg, uL, mmol")
        return Portion(value, typed["unit"].strip(), uncertainty=spread, **{kind: source})


class StockForm(PlainForm):
    """A solution made up to a volume; its portions are rows beside it."""

    code = line("Code", "What stands on the flask, once in the project.", maxlength=80)
    volume_value = number("Made up to a volume of")
    volume_unit = forms.CharField(
        label="Unit",
        required=False,
        initial="mL",
        widget=forms.TextInput({"class": "unit", "autocomplete": "off"}),
    )
    volume_uncertainty = number("± standard uncertainty")
    solvent = line("Solvent", maxlength=200)
    made_on = line("Made on", "A date such as 2026-03-05.", placeholder="2026-03-05", maxlength=40)
    temperature = number("Temperature when made up / °C")
    reason = line("Reason for the revision", maxlength=1000)

    places: Mapping[str, str] = {
        "volume": "volume_value", "volume.unit": "volume_unit", "volume.value": "volume_value",
        "volume.total_volume": "volume_value", "": "source", "value": "amount", "lot": "source", "compound": "source",
        "standard_uncertainty": "uncertainty", "molar_mass": "source", "density": "source",
    }  # fmt: skip

    def values(self) -> dict[str, Any]:
        """What `make_up_stock` takes, but the portions."""
        typed, numbers = self.cleaned_data, Numbers()
        unit = typed["volume_unit"].strip()
        if not unit:
            numbers.wrong("a unit is missing", field="volume_unit", cure="for example mL")
        volume = numbers.read(typed["volume_value"], field="volume_value", required=True)
        spread = numbers.read(typed["volume_uncertainty"], field="volume_uncertainty")
        celsius = numbers.read(typed["temperature"], field="temperature")
        numbers.done()
        return {
            "code": typed["code"],
            "volume": (volume, unit),
            "volume_uncertainty": spread or 0.0,
            "solvent": typed["solvent"],
            "made_on": typed["made_on"],
            "temperature": None if celsius is None else float(convert(celsius, "degC", "K")),
            "reason": typed["reason"],
        }

    @staticmethod
    def begun(
        content: Mapping[str, Any], names: Mapping[str, tuple[str, str]]
    ) -> tuple[dict[str, str], list[dict[str, str]]]:
        """What the form and its rows begin with; ``names`` are those of `names_behind`."""
        volume, kelvin = content["volume"], content["temperature"]
        values = {
            "code": content["code"],
            "volume_value": number_text(convert(volume["value"], "L", "mL")),
            "volume_unit": "mL",
            "volume_uncertainty": number_text(convert(volume["u"], "L", "mL")) if volume["u"] else "",
            "solvent": content["solvent"],
            "made_on": content["made_on"],
            "temperature": "" if kelvin is None else number_text(round(convert(kelvin, "K", "degC"), 9)),
        }
        rows = []
        for portion in content["portions"]:
            kind, source = names.get(portion["lot"] or portion["compound"], ("lot", ""))
            rows.append(
                {
                    "kind": kind,
                    "source": source,
                    "amount": number_text(portion["value"]),
                    "unit": portion["unit"],
                    "uncertainty": number_text(portion["u"]) if portion["u"] else "",
                }
            )
        return values, rows


def fraction_typed(text: str, numbers: Numbers, *, field: str) -> float | None:
    """A mass fraction: '0.985', or the same as '98.5 %'."""
    given = text.strip()
    if given.endswith("%"):
        found = numbers.read(given[:-1], field=field, required=True)
        return None if found is None else float(convert(found, "%", "1"))
    return numbers.read(given, field=field, cure="a mass fraction such as 0.985, or 98.5 %", required=True)
