"""One concentration table: its numbers, what they were made from, what uses them, and what replaces it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from django import forms
from django.contrib import messages
from django.http import HttpResponse, HttpResponseBase
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.datasets.selectors import datasets_in
from kinetics_db.errors import InvalidInput
from kinetics_db.exchange.tables import table_csv
from kinetics_db.fits.selectors import fits_in
from kinetics_db.measurements.selectors import table_by_id, tables_of_run
from kinetics_db.measurements.services import supersede_table
from kinetics_db.projects.selectors import may_contribute, require_contributor
from kinetics_db.web.downloads import csv_response
from kinetics_db.web.forms import PlainForm, form_response, problems_shown
from kinetics_db.web.pages import ReadersRequest, download, form_page, page
from kinetics_db.web.present.options import options_in_words, recipe_in_words
from kinetics_db.web.present.reductions import reduced_sheet

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable

SHOWN_ROWS = 50
MOST_USES = 50


class SupersedeForm(PlainForm):
    """Which newer table counts instead, and why."""

    newer = forms.ChoiceField(label="Newer table of the run", required=False)
    reason = forms.CharField(
        label="Why it is replaced",
        required=False,
        widget=forms.Textarea({"rows": 3}),
        help_text="Stays in the record. Fits on the older table are marked as stale.",
    )

    def offer(self, tables: Sequence[ConcentrationTable]) -> None:
        """The tables to choose from."""
        select = self.fields["newer"]
        assert isinstance(select, forms.ChoiceField)
        select.choices = [(str(t.pk), f"table {t.number}: {t.reduction}") for t in tables]


@page
def table(request: ReadersRequest, table_id: int) -> HttpResponse:
    """Concentrations with their uncertainties and where they come from."""
    user = request.user
    found = table_by_id(user=user, table_id=table_id)
    run = found.run
    title = f"Run {run.code}, table {found.number}"
    sheet = reduced_sheet(
        found.table,
        basis=found.basis,
        notes=found.notes,
        scale_errors=found.scale_errors,
        title=f"{title}: concentrations",
        first=SHOWN_ROWS,
    )
    datasets = list(datasets_in(user=user, project_id=run.project_id).filter(items__table=found)[:MOST_USES])
    fits = fits_in(user=user, project_id=run.project_id).filter(dataset__in=[d.pk for d in datasets])
    context = {
        "project": run.project,
        "run": run,
        "table": found,
        "title": title,
        "sheet": sheet,
        "stated": options_in_words(found.signal_table.reader_options),
        "recipe": recipe_in_words(found.reduction.content),
        "superseded": getattr(found, "superseded_by", None),
        "newer": _newer(request, found),
        "datasets": datasets,
        "fits": list(
            fits.defer("canonical", "dataset__canonical", "mechanism_version__canonical")[:MOST_USES]
        ),
        "may_write": may_contribute(user=user, project_id=run.project_id),
    }
    return render(request, "web/tables/table.html", context)


@download
def table_as_csv(request: ReadersRequest, table_id: int) -> HttpResponseBase:
    """Every row of a table, with standard uncertainties."""
    found = table_by_id(user=request.user, table_id=table_id)
    pieces = table_csv(user=request.user, table_id=table_id)
    return csv_response(request, pieces, name=f"{found.run.code}-table-{found.number}", digest=found.digest)


@form_page
def supersede(request: ReadersRequest, table_id: int) -> HttpResponse:
    """Declare that a newer table of the same run counts instead of this one."""
    user = request.user
    older = table_by_id(user=user, table_id=table_id)
    require_contributor(user=user, project_id=older.run.project_id)
    newer = _newer(request, older)
    form = SupersedeForm(request.POST if request.method == "POST" else None)
    form.offer(newer)
    if request.method == "POST" and form.is_valid():
        chosen = next((t for t in newer if str(t.pk) == form.cleaned_data["newer"]), None)
        with problems_shown(form):
            if chosen is None:
                raise InvalidInput(
                    "no newer table is chosen", field="newer", cure="a later table of this run"
                )
            supersede_table(user=user, older=older, newer=chosen, reason=form.cleaned_data["reason"])
            messages.success(request, f"Table {chosen.number} counts from now on.")
            return redirect("web:table", older.pk)
    context = {"project": older.run.project, "run": older.run, "table": older, "newer": newer, "form": form}
    return form_response(request, "web/tables/supersede.html", context)


def _newer(request: ReadersRequest, older: ConcentrationTable) -> list[ConcentrationTable]:
    """Later tables of the run, the newest first."""
    return [t for t in tables_of_run(user=request.user, run=older.run) if t.number > older.number]


urlpatterns = [
    path("tables/<int:table_id>/", table, name="table"),
    path("tables/<int:table_id>.csv", table_as_csv, name="table-csv"),
    path("tables/<int:table_id>/supersede/", supersede, name="supersede-table"),
]
