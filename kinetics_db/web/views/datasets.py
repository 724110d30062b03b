"""Datasets: the list, choosing tables for one, one dataset, its numbers as a file."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from django.contrib import messages
from django.db.models import Q, QuerySet
from django.http import HttpResponse, HttpResponseBase
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.datasets.selectors import dataset_by_id, datasets_in, item_lines, staleness_of
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.selectors import verdict_counts
from kinetics_db.exchange.tidy import tidy_csv_pieces
from kinetics_db.fits.selectors import fit_lines
from kinetics_db.measurements.selectors import current_tables_in
from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import may_contribute, project_with_role, require_contributor
from kinetics_db.runs.query import RunQuery, runs_found
from kinetics_db.web.csv_files import csv_download
from kinetics_db.web.dataset_forms import DatasetForm, TableRow, numbers_in, table_rows, typed_for
from kinetics_db.web.forms import form_response, problem_words
from kinetics_db.web.pages import ReadersRequest, form_page, page
from kinetics_db.web.present.datasets import item_sheets
from kinetics_db.web.present.fits import line_sheets

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable
    from kinetics_db.projects.models import Project

MOST_SHOWN = 200
MOST_FITS = 50
MOST_REASONS = 20
HEAVY = ("canonical", "blob", "signal_table__canonical", "signal_table__blob", "reduction__canonical",
         "signal_table__file__canonical")  # fmt: skip


@page
def datasets(request: ReadersRequest, slug: str) -> HttpResponse:
    """Datasets of a project, newest first."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    listed = page_of(
        datasets_in(user=user, project_id=project.pk),
        order=("-created", "-id"),
        cursor=request.GET.get("cursor"),
    )
    context = {
        "project": project,
        "page": listed,
        "may_write": may_contribute(user=user, project_id=project.pk),
    }
    return render(request, "web/datasets/list.html", context)


@dataclass(frozen=True)
class Found:
    """What the filter of the form finds: the tables that are shown, and how many there are."""

    matching: QuerySet[ConcentrationTable]
    rows: Sequence[TableRow]
    total: int


@form_page
def new_dataset(request: ReadersRequest, slug: str) -> HttpResponse:
    """Choose tables and freeze them. The button 'show' only looks through other runs and keeps what is chosen."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    require_contributor(user=user, project_id=project.pk)
    posted = request.method == "POST"
    freezing = posted and "show" not in request.POST
    form = DatasetForm(request.POST if posted else request.GET)
    found = _found(request, project, form)
    if freezing and form.is_valid():
        response = _frozen(request, project, form, found)
        if response is not None:
            return response
    context = {"project": project, "form": form, "found": found, "most": MOST_SHOWN}
    if posted and not freezing and not form.errors:
        return render(request, "web/datasets/new.html", context)
    return form_response(request, "web/datasets/new.html", context)


def _found(request: ReadersRequest, project: Project, form: DatasetForm) -> Found:
    """Tables by the filter; those chosen or typed for already are shown first, whatever the filter says."""
    chosen = numbers_in(request.POST.getlist("tables"))
    touched = {*chosen, *typed_for(request.POST)}
    every = current_tables_in(user=request.user, project_id=project.pk).defer(*HEAVY)
    every = every.prefetch_related("columns")
    matching = every.none()
    try:
        query = RunQuery.from_text(str(form["filter"].value() or ""))
        runs = runs_found(user=request.user, query=query, project_id=project.pk)
        matching = every.filter(run__in=runs.values("pk"))
    except InvalidInput as error:
        for problem in error.problems:
            form.add_error("filter", problem_words(problem))
    shown = list(matching[: MOST_SHOWN + 1])
    total = len(shown) if len(shown) <= MOST_SHOWN else matching.count()
    known = {table.pk for table in shown}
    kept = [table for table in every.filter(pk__in=touched) if table.pk not in known] if touched else []
    data = request.POST if request.method == "POST" else None
    return Found(matching, table_rows([*kept, *shown[:MOST_SHOWN]], chosen=chosen, data=data), total)


def _frozen(
    request: ReadersRequest, project: Project, form: DatasetForm, found: Found
) -> HttpResponse | None:
    """Freeze what is chosen; None, with the reasons in the form, where that is refused."""
    by_id = {row.table.pk: row for row in found.rows}
    windows = {}
    for row in found.rows:
        window = row.window.window(row.unit) if row.window.is_valid() else None
        if window is not None and not (row.chosen or form.cleaned_data["every"]):
            row.problems.append(
                "A part is typed here, but the table is not taken: tick it, or empty the fields"
            )
        elif window is not None:
            windows[row.table.pk] = window
    if any(row.window.errors or row.problems for row in found.rows):
        form.add_error(None, "Something is wrong with the part of a table that counts; see below.")
        return None
    newest = (
        datasets_in(user=request.user, project_id=project.pk).order_by("-pk").values_list("pk", flat=True)
    )
    before = newest.first() or 0
    try:
        dataset = freeze_dataset(
            user=request.user,
            project_id=project.pk,
            name=form.cleaned_data["name"],
            table_ids=_ids(request, project, form, found),
            windows=windows,
        )
    except InvalidInput as error:
        for problem in error.problems:
            first, _, number = (problem.field or "").partition(".")
            if first == "windows" and number.isdecimal() and int(number) in by_id:
                by_id[int(number)].problems.append(problem_words(problem))
                form.add_error(None, "Something is wrong with the part of a table that counts; see below.")
            else:
                form.add_error(first if first in form.fields else None, problem_words(problem))
        return None
    if dataset.pk > before:
        messages.success(request, f"{dataset} is frozen.")
    else:
        messages.info(request, f"This choice is {dataset}, which is here already.")
    return redirect("web:dataset", dataset.pk)


def _ids(request: ReadersRequest, project: Project, form: DatasetForm, found: Found) -> list[int]:
    """Ids of the chosen tables by run; those that are not here are left for the service to name."""
    chosen = numbers_in(request.POST.getlist("tables"))
    wanted = Q(pk__in=chosen)
    if form.cleaned_data["every"]:
        wanted |= Q(pk__in=found.matching.order_by().values("pk"))
    every = current_tables_in(user=request.user, project_id=project.pk)
    ordered = list(every.filter(wanted).values_list("pk", flat=True))
    known = set(ordered)
    return [*ordered, *(pk for pk in dict.fromkeys(chosen) if pk not in known)]


@page
def dataset(request: ReadersRequest, dataset_id: int) -> HttpResponse:
    """One dataset: its runs and tables, whether they are still the newest, the fits on it."""
    user = request.user
    found = dataset_by_id(user=user, dataset_id=dataset_id)
    project = found.project
    stale = staleness_of([found.pk])[found.pk].reasons
    fits = list(fit_lines(user=user, project_id=project.pk).filter(dataset=found)[: MOST_FITS + 1])
    shown = fits[:MOST_FITS]
    context = {
        "project": project,
        "dataset": found,
        "items": item_sheets(item_lines(found), found.content["items"]),
        "stale": stale[:MOST_REASONS],
        "further_stale": max(0, len(stale) - MOST_REASONS),
        "fits": line_sheets(shown, verdict_counts(user=user, fit_ids=[fit.pk for fit in shown])),
        "more_fits": len(fits) > MOST_FITS,
        "may_write": may_contribute(user=user, project_id=project.pk),
    }
    return render(request, "web/datasets/dataset.html", context)


@page
def dataset_csv(request: ReadersRequest, dataset_id: int) -> HttpResponseBase:
    """Every value of the dataset as a tidy table."""
    found = dataset_by_id(user=request.user, dataset_id=dataset_id)
    pieces = tidy_csv_pieces(user=request.user, dataset_id=found.pk)
    return csv_download(f"dataset-{found.pk}.csv", pieces)


urlpatterns = [
    path("projects/<slug:slug>/datasets/", datasets, name="datasets"),
    path("projects/<slug:slug>/datasets/new/", new_dataset, name="new-dataset"),
    path("datasets/<int:dataset_id>/", dataset, name="dataset"),
    path("datasets/<int:dataset_id>.csv", dataset_csv, name="dataset-csv"),
]
