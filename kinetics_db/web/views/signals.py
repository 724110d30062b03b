"""Signals as they were read from a file, and their reduction to concentrations."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from django.contrib import messages
from django.http import HttpResponse, HttpResponseBase
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.engine.recipes import RECIPES, AsReported, InternalStandard
from kinetics_db.engine.units import kind_of_unit
from kinetics_db.errors import InvalidInput
from kinetics_db.exchange.tables import signals_csv
from kinetics_db.measurements.likeness import reductions_like, species_in
from kinetics_db.measurements.selectors import signal_table_by_id, tables_of_run
from kinetics_db.measurements.services import preview_reduction, reduce_signals
from kinetics_db.projects.selectors import may_contribute, require_contributor
from kinetics_db.runs.selectors import latest_revision, start_concentrations
from kinetics_db.web.downloads import csv_response
from kinetics_db.web.pages import ReadersRequest, download, form_page, page
from kinetics_db.web.present.options import options_in_words
from kinetics_db.web.present.reductions import ReducedSheet, tried_sheet
from kinetics_db.web.present.tables import signal_charts, signals_sheet, span_of
from kinetics_db.web.recipe_forms import KINDS, RecipeForms

if TYPE_CHECKING:
    from kinetics_db.engine.tables import Table
    from kinetics_db.measurements.models import Reduction, SignalTable

SHOWN_ROWS = 50
MOST_SPECIES = 200
NOT_ACCEPTED = 422


@page
def signals(request: ReadersRequest, signal_table_id: int) -> HttpResponse:
    """How a file was read, its signals over time, and the concentrations made from them."""
    found = signal_table_by_id(user=request.user, signal_table_id=signal_table_id)
    run, table = found.file.run, found.table
    context = {
        "project": run.project,
        "run": run,
        "signals": found,
        "stated": options_in_words(found.reader_options),
        "charts": signal_charts(table, title=f"Run {run.code}: signals"),
        "numbers": signals_sheet(table, first=SHOWN_ROWS),
        "span": span_of(table),
        "tables": [t for t in tables_of_run(user=request.user, run=run) if t.signal_table_id == found.pk],
        "may_write": may_contribute(user=request.user, project_id=run.project_id),
    }
    return render(request, "web/files/signals.html", context)


@download
def signals_as_csv(request: ReadersRequest, signal_table_id: int) -> HttpResponseBase:
    """All signals of a table."""
    found = signal_table_by_id(user=request.user, signal_table_id=signal_table_id)
    pieces = signals_csv(user=request.user, signal_table_id=signal_table_id)
    return csv_response(
        request, pieces, name=f"{found.file.run.code}-signals-{found.pk}", digest=found.digest
    )


@form_page
def reduce(request: ReadersRequest, signal_table_id: int) -> HttpResponse:
    """Say what the signals mean, see the concentrations, store them. ``?like=`` begins with another recipe."""
    user = request.user
    found = signal_table_by_id(user=user, signal_table_id=signal_table_id)
    require_contributor(user=user, project_id=found.file.project_id)
    if request.method == "POST":
        return _sent(request, found)
    table = found.table
    offered = _offered(request, found, table)
    like = _chosen(request.GET.get("like"), offered)
    kind = request.GET.get("kind") or (like.method if like else _likely_kind(table))
    if kind not in RECIPES:
        raise InvalidInput(
            f"there is no recipe of kind '{kind[:40]}'", field="kind", cure="one of " + ", ".join(RECIPES)
        )
    like = like if like is not None and like.method == kind else None
    filled = RecipeForms(
        kind, table, recipe=like.content if like else None, name=like.name if like else dict(KINDS)[kind]
    )
    return _shown(request, found, filled, offered=offered, like=like)


def _sent(request: ReadersRequest, found: SignalTable) -> HttpResponse:
    """Preview or store what was filled in; whatever is wrong stands at its field."""
    user, table = request.user, found.table
    kind = request.POST.get("kind", "")
    if kind not in RECIPES:
        raise InvalidInput(
            f"there is no recipe of kind '{kind[:40]}'", field="kind", cure="one of " + ", ".join(RECIPES)
        )
    filled = RecipeForms(kind, table, data=request.POST, live=bool(request.htmx))
    recipe, tried = filled.recipe(), None
    if recipe is not None:
        try:
            if request.POST.get("do") == "store":
                stored = reduce_signals(
                    user=user, signal_table=found, name=filled.top.cleaned_data.get("name", ""), recipe=recipe
                )
                messages.success(request, f"Table {stored.number} of run {found.file.run.code} is stored.")
                return redirect("web:table", stored.pk)
            result = preview_reduction(user=user, signal_table=found, recipe=recipe)
            tried = tried_sheet(result)
        except InvalidInput as error:
            filled.show(error)
    return _shown(request, found, filled, tried=tried)


def _shown(
    request: ReadersRequest,
    found: SignalTable,
    filled: RecipeForms,
    *,
    offered: Sequence[Reduction] | None = None,
    like: Reduction | None = None,
    tried: ReducedSheet | None = None,
) -> HttpResponse:
    run = found.file.run
    part = bool(request.htmx)
    context = {
        "project": run.project,
        "run": run,
        "signals": found,
        "forms": filled,
        "form": filled.top,
        "tried": tried,
        "like": like,
        "kinds": KINDS,
        "offered": [] if part else offered or _offered(request, found, found.table),
        "species": [] if part else _species(request, found),
    }
    if part:  # a look while the form is filled in, no submission
        return render(request, "web/files/reduced.html", context)
    wrong = request.method == "POST" and filled.is_wrong
    return render(request, "web/files/reduce.html", context, status=NOT_ACCEPTED if wrong else 200)


def _offered(request: ReadersRequest, found: SignalTable, table: Table) -> Sequence[Reduction]:
    return reductions_like(user=request.user, project_id=found.file.project_id, signals=table.names("signal"))


def _chosen(asked: str | None, offered: Sequence[Reduction]) -> Reduction | None:
    """The recipe asked for, else the newest one; 'none' asks for an empty form."""
    if asked is None:
        return offered[0] if offered else None
    return next((reduction for reduction in offered if str(reduction.pk) == asked), None)


def _likely_kind(table: Table) -> str:
    """As reported where all columns are concentrations or percentages already."""
    units = [column.unit for column in table.columns if column.quantity == "signal"]
    ready = all(unit and kind_of_unit(unit) in ("concentration", "relative") for unit in units)
    return AsReported.kind if ready else InternalStandard.kind


def _compounds(found: SignalTable) -> list[str]:
    return [part.compound for part in start_concentrations(latest_revision(found.file.run))]


def _species(request: ReadersRequest, found: SignalTable) -> list[str]:
    """Names to choose from: the run's compounds, then what tables of the project call their columns."""
    known = species_in(user=request.user, project_id=found.file.project_id)[:MOST_SPECIES]
    return list(dict.fromkeys([*_compounds(found), *known]))


urlpatterns = [
    path("signals/<int:signal_table_id>/", signals, name="signals"),
    path("signals/<int:signal_table_id>.csv", signals_as_csv, name="signals-csv"),
    path("signals/<int:signal_table_id>/reduce/", reduce, name="reduce"),
]
