"""The small forms that a fit's request is made of: casting, one for each constant, settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from django import forms
from django.utils.safestring import SafeString

from kinetics_db.engine.fitting.checks import ERROR_MODELS
from kinetics_db.engine.fitting.problem import Constant, Prior, Settings, StartConcentration
from kinetics_db.errors import InvalidInput
from kinetics_db.web.forms import PlainForm, problem_words
from kinetics_db.web.names import name_html
from kinetics_db.web.typed import number_or_none, number_text, number_typed

SAME, GROUP, OWN, HELD = "same in all runs", "in a group", "own per run", "held"
SCOPES = (
    (SAME, "the same in all runs"),
    (GROUP, "one for each temperature"),
    (OWN, "its own in each run"),
    (HELD, "held at its start value"),
)
NO_PART = "none"
AS_TARGET = "as:"
"""Stands before the name of a species or observable in a select, so that any name can be chosen."""
NOT_OF_THE_LIST = {"invalid_choice": "Choose one of the list"}
POINT_ERRORS = {
    "as tabulated": "as the tables say",
    "one sigma": "one for all points, found by the fit",
    "one sigma per observable": "one for each observable, found by the fit",
}


def _number_field(label: str, **more: Any) -> forms.CharField:
    widget = forms.TextInput(attrs={"class": "short", "inputmode": "text", "autocomplete": "off"})
    return forms.CharField(required=False, label=label, widget=widget, **more)


class NumbersForm(PlainForm):
    """A form some of whose fields are numbers, typed as text."""

    def number(self, name: str, *, needed: bool = False) -> float | None:
        """A field's number; None, with the reason at the field, where it is none."""
        text = str(self.cleaned_data.get(name, ""))
        try:
            return number_typed(text, field=name) if needed else number_or_none(text, field=name)
        except InvalidInput as error:
            for problem in error.problems:
                self.add_error(name, problem_words(problem))
            return None

    def prior(self) -> Prior | None:
        """The prior, when one of its two numbers was typed; the other is then missing in so many words."""
        typed = [name for name in ("prior_mean", "prior_sd") if str(self.cleaned_data.get(name, "")).strip()]
        if not typed:
            return None
        mean, sd = (self.number(name, needed=True) for name in ("prior_mean", "prior_sd"))
        return None if mean is None or sd is None else Prior(mean, sd)


class BoundedForm(NumbersForm):
    """What constants and start concentrations have in common."""

    start = _number_field("Start value")
    lower = _number_field("Not below")
    upper = _number_field("Not above")
    prior_mean = _number_field("Prior: mean")
    prior_sd = _number_field("Prior: sd", help_text="of ln(value), for what is positive")

    advanced: tuple[str, ...] = ("lower", "upper", "prior_mean", "prior_sd")

    @property
    def is_open(self) -> bool:
        """Whether something stands, or is wrong, in the fields that are folded away."""
        return any(self[name].value() or self[name].errors for name in self.advanced)


class ConstantForm(BoundedForm):
    """How one constant enters the fit."""

    scope = forms.ChoiceField(required=False, label="Scope", choices=SCOPES, error_messages=NOT_OF_THE_LIST)
    starts = forms.CharField(
        required=False,
        label="Start values of single temperatures or runs",
        help_text="One a line, such as 298.15 K: 1.5e-3 or K12: 2e-3. Of a held constant these are its values.",
        widget=forms.Textarea(attrs={"rows": 2, "spellcheck": "false"}),
    )
    signed = forms.BooleanField(required=False, label="may be zero or negative")

    field_order = ("start", "scope", "lower", "upper", "prior_mean", "prior_sd", "starts", "signed")
    advanced = ("lower", "upper", "prior_mean", "prior_sd", "starts", "signed")

    def __init__(self, *args: Any, name: str, unit: str, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.name, self.unit = name, unit

    @property
    def title(self) -> SafeString:
        """The constant's name with its subscript."""
        return name_html(self.name)

    def constant(self) -> Constant | None:
        """The constant as typed; None where a number cannot be read, which the field then says."""
        start = self.number("start", needed=True)
        lower, upper, prior = self.number("lower"), self.number("upper"), self.prior()
        starts = self._starts()
        if start is None or self.errors:
            return None
        scope: Any = self.cleaned_data["scope"] or SAME
        return Constant(
            name=self.name,
            start=start,
            scope=scope,
            lower=lower,
            upper=upper,
            prior=prior,
            group_by="temperature" if scope == GROUP else None,
            starts=starts,
            positive=not self.cleaned_data["signed"],
        )

    def _starts(self) -> dict[str, float]:
        found: dict[str, float] = {}
        for number, line in enumerate(str(self.cleaned_data.get("starts", "")).splitlines(), start=1):
            place, colon, text = (part.strip() for part in line.rpartition(":"))
            if not line.strip():
                continue
            if not colon or not place:
                self.add_error("starts", f"Line {number}: write a temperature or run, a colon and a number")
                continue
            try:
                found[place] = number_typed(text, field="starts")
            except InvalidInput as error:
                self.add_error("starts", f"Line {number}: {problem_words(error.problems[0])}")
        return found


class StartForm(BoundedForm):
    """Whether and how one start concentration is fitted."""

    fitted = forms.BooleanField(required=False, label="fit it")
    scope = forms.ChoiceField(
        required=False,
        label="Scope",
        choices=[(OWN, "its own in each run"), (SAME, "the same in all runs")],
        error_messages=NOT_OF_THE_LIST,
    )

    field_order = ("fitted", "start", "scope", "lower", "upper", "prior_mean", "prior_sd")

    def __init__(self, *args: Any, species: str, unit: str, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.species, self.unit = species, unit

    def start_concentration(self) -> StartConcentration | None:
        """The start concentration as typed; None where it is not fitted, or a number cannot be read."""
        if not self.cleaned_data["fitted"]:
            if any(str(self.cleaned_data[name]).strip() for name in ("start", *self.advanced)):
                self.add_error("fitted", "Tick this to have it fitted, or empty the fields beside it")
            return None
        start = self.number("start", needed=True)
        lower, upper, prior = self.number("lower"), self.number("upper"), self.prior()
        if start is None or self.errors:
            return None
        scope: Any = self.cleaned_data["scope"] or OWN
        return StartConcentration(self.species, start, scope, lower, upper, prior)


class SettingsForm(NumbersForm):
    """How to fit."""

    error_model = forms.ChoiceField(
        required=False,
        label="Standard uncertainty of the points",
        choices=[(name, POINT_ERRORS[name]) for name in ERROR_MODELS],
        error_messages=NOT_OF_THE_LIST,
    )
    confidence = _number_field("Confidence of the intervals", help_text="between 0 and 1")
    starts = _number_field("Starts", help_text="more than one looks for further minima")
    start_spread = _number_field("Spread of further starts", help_text="factor to each side")
    seed = _number_field("Seed of further starts")
    max_seconds = _number_field("At most / s")
    max_iterations = _number_field("Iterations of a start")
    rtol = _number_field("Relative tolerance", help_text="of an integration")
    max_steps = _number_field("Steps of an integration")

    whole = ("starts", "seed", "max_iterations", "max_steps")
    numbers = ("confidence", "start_spread", "max_seconds", "rtol")

    def settings(self) -> Settings | None:
        """The settings as typed, those left empty as they are unless stated."""
        values: dict[str, Any] = {"error_model": self.cleaned_data["error_model"] or Settings.error_model}
        for name in (*self.numbers, *self.whole):
            number = self.number(name)
            if number is None:
                continue
            if name in self.whole:
                if not number.is_integer():
                    self.add_error(name, "Write a whole number")
                    continue
                number = int(number)
            values[name] = number
        return None if self.errors else Settings(**values)


class OwnersForm(PlainForm):
    """Causes of error that the fit leaves out."""

    without_owners = forms.MultipleChoiceField(
        required=False,
        label="Leave out the errors of",
        widget=forms.CheckboxSelectMultiple,
        error_messages=NOT_OF_THE_LIST,
    )

    def __init__(self, *args: Any, owners: Sequence[str], **kwargs: Any):
        super().__init__(*args, **kwargs)
        # What many runs share comes first; each run's own errors after it.
        ordered = sorted(owners, key=lambda owner: (owner.startswith("run "), owner))
        self.fields["without_owners"].choices = [(owner, owner) for owner in ordered]  # type: ignore[attr-defined]


class CastingForm(PlainForm):
    """Who plays whom: a select for each compound and each column."""

    def __init__(
        self,
        *args: Any,
        compounds: Sequence[str],
        columns: Sequence[str],
        species: Sequence[str],
        observables: Sequence[str],
        **kwargs: Any,
    ):
        super().__init__(*args, **kwargs)
        self.places: dict[tuple[str, str], str] = {}
        for what, names, targets in (("compound", compounds, species), ("column", columns, observables)):
            choices = [
                ("", "decide …"),
                *((f"{AS_TARGET}{t}", t) for t in targets),
                (NO_PART, "plays no part"),
            ]
            for i, name in enumerate(names, start=1):
                self.places[what, name] = place = f"{what}-{i}"
                self.fields[place] = forms.ChoiceField(
                    required=False, label=name, choices=choices, error_messages=NOT_OF_THE_LIST
                )

    def chosen(self, what: str) -> dict[str, str | None]:
        """What was decided for the compounds or the columns; what is still open is absent."""
        found: dict[str, str | None] = {}
        for (kind, name), place in self.places.items():
            value = self.cleaned_data.get(place, "")
            if kind == what and value:
                found[name] = None if value == NO_PART else value.removeprefix(AS_TARGET)
        return found

    def fields_of(self, what: str) -> list[forms.BoundField]:
        """The selects of the compounds or the columns."""
        return [self[place] for (kind, _), place in self.places.items() if kind == what]

    @property
    def of_compounds(self) -> list[forms.BoundField]:
        """Selects of the compounds."""
        return self.fields_of("compound")

    @property
    def of_columns(self) -> list[forms.BoundField]:
        """Selects of the columns."""
        return self.fields_of("column")


def initial_casting(
    form: Mapping[tuple[str, str], str], casting: Mapping[str, Mapping[str, str | None]]
) -> dict[str, str]:
    """Values of the selects (``CastingForm.places``) for a casting, by kind 'compound' and 'column'."""
    return {
        place: NO_PART if target is None else f"{AS_TARGET}{target}"
        for (what, name), place in form.items()
        if name in casting[what]
        for target in (casting[what][name],)
    }


def initial_bounded(entry: Constant | StartConcentration) -> dict[str, str]:
    """Fields of a constant or start concentration as they are typed."""
    prior = entry.prior
    return {
        "start": number_text(entry.start),
        "scope": entry.scope,
        "lower": number_text(entry.lower),
        "upper": number_text(entry.upper),
        "prior_mean": number_text(prior.mean if prior else None),
        "prior_sd": number_text(prior.sd if prior else None),
    }


def initial_constant(constant: Constant) -> dict[str, Any]:
    """Fields of a constant as they are typed."""
    lines = [f"{place}: {number_text(value)}" for place, value in constant.starts.items()]
    return {**initial_bounded(constant), "starts": "\n".join(lines), "signed": not constant.positive}


def initial_settings(settings: Settings) -> dict[str, str]:
    """Fields of the settings as they are typed."""
    names = (*SettingsForm.numbers, *SettingsForm.whole)
    return {"error_model": settings.error_model, **{n: number_text(getattr(settings, n)) for n in names}}
