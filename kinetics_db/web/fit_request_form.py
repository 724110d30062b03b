"""A whole fit request as one form of many small ones, and the service's problems at the fields they are about."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from django import forms
from django.http import QueryDict

from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.network import Network, constant_units
from kinetics_db.engine.shown_numbers import PAGE
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.fits.casting import Casting, propose_casting
from kinetics_db.fits.experiments import DataOfFit, experiments_of
from kinetics_db.fits.request import FitRequest
from kinetics_db.web.fit_forms import (
    BoundedForm,
    CastingForm,
    ConstantForm,
    OwnersForm,
    SettingsForm,
    StartForm,
    initial_bounded,
    initial_casting,
    initial_constant,
    initial_settings,
)
from kinetics_db.web.forms import problem_words

if TYPE_CHECKING:
    from kinetics_db.web.forms import PlainForm

MOST_CONSTANTS = 150
MOST_SPECIES = 300
MOST_NAMED = 6
#: How the checks of a fit begin what they say about one field of a constant.
BEGINNINGS = (
    ("lower bound", "lower"),
    ("a bound", "lower"),
    ("upper bound", "upper"),
    ("prior mean", "prior_mean"),
    ("prior sd", "prior_sd"),
    ("start values of", "starts"),
    ("unknown scope", "scope"),
    ("scope", "scope"),
)
ATTRIBUTES = {"prior.mean": "prior_mean", "prior.sd": "prior_sd", "positive": "signed", "group_by": "scope"}


class FitRequestForm:
    """Every field of a request for one dataset and one mechanism version.

    ``like`` is an earlier request whose choices are shown first, as far as names are the same.
    """

    def __init__(
        self,
        data: QueryDict | None,
        *,
        network: Network,
        found: DataOfFit,
        basis: str,
        like: FitRequest | None = None,
    ):
        self.found = found
        concentration = "mol/L" if basis == "mol/L" else "percent"
        units = constant_units(network, concentration=concentration, time="s")
        self.casting = _casting_form(data, network, found, like)
        earlier = {constant.name: constant for constant in like.constants} if like else {}
        self.constants = [
            ConstantForm(
                data,
                prefix=f"constant-{i}",
                initial=initial_constant(earlier[name]) if name in earlier else {},
                name=name,
                unit=PAGE.unit(units[name]),
            )
            for i, name in enumerate(network.constants, start=1)
        ]
        starts = {start.species: start for start in like.start_concentrations} if like else {}
        self.starts = [
            StartForm(
                data,
                prefix=f"species-{i}",
                initial={**initial_bounded(starts[name]), "fitted": True} if name in starts else {},
                species=name,
                unit=concentration,
            )
            for i, name in enumerate(network.species, start=1)
        ]
        settings = like.settings if like else Settings()
        self.settings = SettingsForm(data, prefix="settings", initial=initial_settings(settings))
        self.owners = OwnersForm(
            data,
            owners=owners_of(found),
            initial={"without_owners": list(like.without_owners) if like else []},
        )

    @property
    def forms(self) -> list[PlainForm]:
        """All forms; what belongs to no field stands on the last one."""
        return [self.casting, *self.constants, *self.starts, self.settings, self.owners]

    @property
    def errors(self) -> bool:
        """Whether anything is wrong anywhere."""
        return any(form.is_bound and form.errors for form in self.forms)

    @property
    def any_start_fitted(self) -> bool:
        """Whether the start concentrations are to be unfolded."""
        return any(form["fitted"].value() or form.is_open or form.errors for form in self.starts)

    def request(self) -> FitRequest | None:
        """The request as typed; None where something cannot be read, which its field then says."""
        unreadable = [form for form in self.forms if not form.is_valid()]  # each says what is wrong with it
        if unreadable:
            return None
        constants = [form.constant() for form in self.constants]
        starts = [form.start_concentration() for form in self.starts]
        settings = self.settings.settings()
        if self.errors or settings is None:
            return None
        return FitRequest(
            casting=Casting(self.casting.chosen("compound"), self.casting.chosen("column")),
            constants=tuple(constant for constant in constants if constant is not None),
            start_concentrations=tuple(start for start in starts if start is not None),
            settings=settings,
            without_owners=tuple(self.owners.cleaned_data["without_owners"]),
        )

    def show(self, error: InvalidInput) -> None:
        """Put what `fits.services.request_fit` refuses to the fields that it is about."""
        rows: dict[str, BoundedForm] = {form.name: form for form in self.constants}
        rows |= {f"[{form.species}]0": form for form in self.starts}
        names = set(self.found.names)
        of_runs: dict[tuple[str, str], list[str]] = {}
        for problem in error.problems:
            field = problem.field or ""
            base, _, attribute = field.partition(".")
            if field.startswith("casting."):
                self._at_casting(problem)
            elif field in rows or base in rows:
                row = rows.get(field) or rows[base]
                row.add_error(_place(problem, attribute, row), problem_words(problem))
            elif field in self.settings.fields:
                self.settings.add_error(field, problem_words(problem))
            elif field in names:
                words = problem.message.removeprefix(f"{field}: ")
                of_runs.setdefault((words, problem.cure), []).append(field)
            else:
                self.owners.add_error(
                    "without_owners" if field == "without_owners" else None, problem_words(problem)
                )
        for (words, cure), runs in of_runs.items():
            self.owners.add_error(None, problem_words(Problem(f"{_several(runs)}: {words}", cure=cure)))

    def _at_casting(self, problem: Problem) -> None:
        _, what, name = (*(problem.field or "").split(".", 2), "")[:3]
        place = self.casting.places.get((what.removesuffix("s"), name))
        cure = problem.cure.replace("null to leave it out", "'plays no part'")
        self.casting.add_error(place, problem_words(replace(problem, cure=cure)))


def _casting_form(
    data: QueryDict | None, network: Network, found: DataOfFit, like: FitRequest | None
) -> CastingForm:
    form = CastingForm(
        data,
        prefix="cast",
        compounds=found.compounds,
        columns=found.columns,
        species=network.species,
        observables=network.observable_names,
    )
    proposal = propose_casting(network, compounds=found.compounds, columns=found.columns)
    earlier = like.casting if like else Casting({}, {})
    form.initial = initial_casting(
        form.places,
        {
            "compound": {**proposal.compounds, **_known(earlier.compounds, network.species)},
            "column": {**proposal.columns, **_known(earlier.columns, network.observable_names)},
        },
    )
    return form


def _known(casting: Mapping[str, str | None], targets: Sequence[str]) -> dict[str, str | None]:
    return {name: target for name, target in casting.items() if target is None or target in targets}


def owners_of(found: DataOfFit) -> list[str]:
    """Owners of every cause of error of the data, whatever the casting."""
    everything = Casting({name: name for name in found.compounds}, {name: name for name in found.columns})
    _, nuisances = experiments_of(found, everything)
    return list(dict.fromkeys(nuisance.owner for nuisance in nuisances))


def _place(problem: Problem, attribute: str, row: forms.Form) -> str | None:
    """The field of a constant's row that a problem is about."""
    if attribute:
        name = ATTRIBUTES.get(attribute, attribute.partition(".")[0])
        return name if name in row.fields else None
    if "is grouped by" in problem.message:
        return "scope"
    found = next((field for start, field in BEGINNINGS if problem.message.startswith(start)), "start")
    return found if found in row.fields else "start"


def _several(names: Sequence[str]) -> str:
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return ", ".join(names[:MOST_NAMED]) + more


def too_large(network: Network) -> str:
    """Why the page does not offer fields for a network; empty where it does."""
    if len(network.constants) > MOST_CONSTANTS:
        return f"{len(network.constants)} constants are more than this page has room for ({MOST_CONSTANTS})"
    if len(network.species) > MOST_SPECIES:
        return f"{len(network.species)} species are more than this page has room for ({MOST_SPECIES})"
    return ""
