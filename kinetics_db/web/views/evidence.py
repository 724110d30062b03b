"""The evidence grid of a project: page by page, filtered, and whole as a file."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any
from urllib.parse import urlencode

from django.http import HttpResponse, StreamingHttpResponse
from django.shortcuts import render
from django.urls import path

from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.evidence.selectors import Columns, GridColumn, grid_columns, grid_of, tried_run_ids
from kinetics_db.paging import LARGEST_SIZE, page_of
from kinetics_db.projects.selectors import project_with_role
from kinetics_db.runs.query import RunQuery, runs_found
from kinetics_db.runs.selectors import latest_revisions
from kinetics_db.web.csv_files import csv_file
from kinetics_db.web.forms import filter_words
from kinetics_db.web.pages import ReadersRequest, page
from kinetics_db.web.present.grid import grid_sheet
from kinetics_db.web.present.runs import temperature_of

if TYPE_CHECKING:
    from django.db.models import QuerySet

    from kinetics_db.accounts.models import User
    from kinetics_db.runs.models import Run

MOST_COLUMNS = 12
"""More do not stand side by side; a mechanism can be chosen to see its older ones."""
ORDER = ("code", "id")
CSV_HEADING = (
    "run",
    "mechanism",
    "dataset",
    "fit",
    "verdict",
    "observable",
    "p",
    "nrmse",
    "pull",
    "pull_of",
    "table",
)


@page
def evidence(request: ReadersRequest, slug: str) -> HttpResponse:
    """50 runs down, the newest versions across. ``?q=`` chooses runs, ``?mechanism=`` versions."""
    user = request.user
    project, role = project_with_role(user=user, slug=slug)
    text, mechanism = request.GET.get("q", ""), request.GET.get("mechanism", "")
    chosen = _columns(user, project.pk, mechanism, most=MOST_COLUMNS)
    context: dict[str, Any] = {
        "project": project,
        "role": role,
        "text": text,
        "mechanism": mechanism,
        "mechanisms": chosen.mechanisms,
        "older": chosen.left_out,
        "query": urlencode({name: value for name, value in (("q", text), ("mechanism", mechanism)) if value}),
    }
    try:
        query = RunQuery.from_text(text)
    except InvalidInput as error:
        context["problems"] = filter_words(error)
        return render(request, "web/evidence/evidence.html", context, status=400)
    tried = _tried(user, project.pk, query, chosen.columns)
    runs = page_of(tried, order=ORDER, cursor=request.GET.get("cursor"))
    ids = [run.pk for run in runs.items]
    grid = grid_of(user=user, project_id=project.pk, run_ids=ids, columns=chosen.columns)
    revisions = latest_revisions(ids)
    temperatures = {run_id: temperature_of(revision.content) for run_id, revision in revisions.items()}
    context |= {
        "page": runs,
        "grid": grid_sheet(grid, runs.items, temperatures, project.verdict_thresholds),
    }
    return render(request, "web/evidence/evidence.html", context)


@page
def evidence_csv(request: ReadersRequest, slug: str) -> StreamingHttpResponse:
    """The grid as a file with a line for each verdict, all pages and all columns of it."""
    project, _ = project_with_role(user=request.user, slug=slug)
    query = RunQuery.from_text(request.GET.get("q", ""))
    columns = _columns(request.user, project.pk, request.GET.get("mechanism", ""), most=None).columns
    tried = _tried(request.user, project.pk, query, columns)
    lines = _lines(request.user, project.pk, tried, columns)
    return csv_file(f"{project.slug}-evidence.csv", CSV_HEADING, lines)


def _columns(user: User, project_id: int, mechanism: str, *, most: int | None) -> Columns:
    chosen = grid_columns(user=user, project_id=project_id, mechanism=mechanism, most=most)
    if mechanism and mechanism not in chosen.mechanisms:
        raise NotFound(f"no fit of a mechanism '{mechanism:.80}' has finished in this project")
    return chosen


def _tried(user: User, project_id: int, query: RunQuery, columns: Sequence[GridColumn]) -> QuerySet[Run]:
    found = runs_found(user=user, query=query, project_id=project_id)
    return found.filter(pk__in=tried_run_ids(columns))


def _lines(
    user: User, project_id: int, tried: QuerySet[Run], columns: Sequence[GridColumn]
) -> Iterator[tuple[object, ...]]:
    cursor: str | None = ""
    while cursor is not None:
        runs = page_of(tried, order=ORDER, cursor=cursor, size=LARGEST_SIZE)
        ids = [run.pk for run in runs.items]
        cells = grid_of(user=user, project_id=project_id, run_ids=ids, columns=columns).cells
        for run in runs.items:
            for column in columns:
                cell = cells.get((run.code, column.fit_id))
                if cell is None:
                    verdict: tuple[object, ...] = ("never tried", "", None, None, None, "", "")
                else:
                    verdict = (
                        cell.verdict, cell.observable, cell.p_value, cell.nrmse, cell.pull, cell.pull_name, cell.table
                    )  # fmt: skip
                yield run.code, column.mechanism, column.dataset, column.fit_id, *verdict
        cursor = runs.next


urlpatterns = [
    path("projects/<slug:slug>/evidence/", evidence, name="evidence"),
    path("projects/<slug:slug>/evidence.csv", evidence_csv, name="evidence-csv"),
]
