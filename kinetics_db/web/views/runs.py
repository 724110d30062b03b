"""The list of runs, one run's sheet, and sealing it. Logging and revising stand in `run_entry`."""

from __future__ import annotations

from typing import TYPE_CHECKING
from urllib.parse import urlencode

from django.contrib import messages
from django.http import HttpRequest, HttpResponse, StreamingHttpResponse
from django.shortcuts import redirect, render
from django.template.loader import render_to_string
from django.urls import path

from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.evidence.explanations import explanations_of_run
from kinetics_db.exchange.runs import runs_csv
from kinetics_db.measurements.rows import run_rows
from kinetics_db.measurements.selectors import files_of_run, tables_of_run
from kinetics_db.paging import Page, page_of
from kinetics_db.projects.selectors import may_contribute, project_with_role
from kinetics_db.provenance.remembered import Remembered
from kinetics_db.provenance.selectors import head_of_record
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found
from kinetics_db.runs.selectors import entry_of, replicates_of, run_by_id, run_sheet
from kinetics_db.runs.services import seal_run
from kinetics_db.web.forms import filter_words
from kinetics_db.web.pages import ReadersRequest, action, page
from kinetics_db.web.present.entries import differences
from kinetics_db.web.present.explanations import explanation_list
from kinetics_db.web.present.run_list import run_list
from kinetics_db.web.present.run_sheet import run_page

if TYPE_CHECKING:
    from kinetics_db.projects.models import Project

LONGEST_NUMBER = 8
LISTS: Remembered[tuple[Project, str]] = Remembered(200)
"""Projects with pages of their lists as HTML: runs, tables, projects, roles and accounts are all audited."""


@page
def runs(request: ReadersRequest, slug: str) -> HttpResponse:
    """Runs of a project, 50 at a time. ``?q=`` filters, ``?by=`` orders. A filter that cannot be read lists nothing."""
    user = request.user
    text, order, cursor = request.GET.get("q", ""), _order(request), request.GET.get("cursor", "")
    query, problems = _query(text)

    def listed() -> tuple[Project, str]:
        project, role = project_with_role(user=user, slug=slug)
        found: Page | None = None
        if query is not None:
            matching = runs_found(user=user, query=query, project_id=project.pk)
            found = page_of(matching, order=RUN_ORDERS[order], cursor=cursor)
        return project, _section(project, role != "reader", text, problems, found, order)

    key = (user.pk, user.limits, user.time_zone, slug, text, order, cursor)
    project, section = LISTS.get(key, head=head_of_record(), make=listed)
    context = {"project": project, "section": section}
    return render(request, "web/runs/list.html", context, status=200 if query is not None else 400)


def _section(
    project: Project, may_write: bool, text: str, problems: list[str], found: Page | None, order: str
) -> str:
    """The list with its filter and margin."""
    kept = {"q": text} if text else {}
    return render_to_string(
        "web/runs/section.html",
        {
            "project": project,
            "may_write": may_write,
            "text": text,
            "problems": problems,
            "page": found,
            "list": run_list(run_rows(found.items)) if found is not None else None,
            "order": order,
            "by_code": _heading(order, "code", "code, from the end", ("A to Z", "Z to A"), "code", kept),
            "by_time": _heading(order, "oldest", "newest", ("oldest first", "newest first"), "newest", kept),
            "query": urlencode({**kept, "by": order}),
        },
    )


@page
def runs_as_csv(request: ReadersRequest, slug: str) -> StreamingHttpResponse | HttpResponse:
    """The list with its filter and order, all pages of it, as one file."""
    project, _ = project_with_role(user=request.user, slug=slug)
    query = RunQuery.from_text(request.GET.get("q", ""))
    pieces = runs_csv(user=request.user, project_id=project.pk, query=query, order=_order(request))
    response = StreamingHttpResponse(pieces, content_type="text/csv; charset=utf-8")
    response.headers["Content-Disposition"] = f'attachment; filename="{project.slug}-runs.csv"'
    return response


@page
def run(request: ReadersRequest, run_id: int) -> HttpResponse:
    """Everything of one run; ``?r=`` shows an older revision as it was."""
    sheet = run_sheet(user=request.user, run_id=run_id, number=_number(request.GET.get("r", "")))
    run, user = sheet.run, request.user
    tables = list(tables_of_run(user=user, run=run, numbers=True))
    newest = sheet if sheet.is_newest else run_sheet(user=user, run_id=run_id)
    return render(
        request,
        "web/runs/sheet.html",
        {
            "project": run.project,
            "run": run,
            "sheet": sheet,
            "shown": run_page(sheet, tables),
            "tables": tables,
            "files": list(files_of_run(user=user, run=run)),
            "repeated_by": list(replicates_of(user=user, run=run)),
            "explained": explanation_list(explanations_of_run(user=user, run_id=run.pk)),
            "may_write": may_contribute(user=user, project_id=run.project_id),
            "since": []
            if sheet.is_newest
            else differences(entry_of(sheet.revision), entry_of(newest.revision)),
        },
    )


@action
def seal(request: ReadersRequest, run_id: int) -> HttpResponse:
    """Declare the run complete."""
    sealed = seal_run(user=request.user, run=run_by_id(user=request.user, run_id=run_id))
    messages.success(
        request, f"Run {sealed.code} is sealed. Later changes are amendments and ask for a reason."
    )
    return redirect("web:run", sealed.pk)


def _order(request: HttpRequest) -> str:
    asked = request.GET.get("by", "newest")
    if asked not in RUN_ORDERS:
        raise InvalidInput(f"there is no order '{asked[:24]}'", field="by", cure=", ".join(RUN_ORDERS))
    return asked


def _heading(
    order: str, up: str, down: str, words: tuple[str, str], first: str, kept: dict[str, str]
) -> dict[str, str]:
    """A column's heading: how it is sorted now, in words, and the address that sorts it the other way.

    ``first`` is the order to begin with while the list is sorted by something else.
    """
    now = {up: (words[0], "ascending"), down: (words[1], "descending")}.get(order, ("", ""))
    other = {up: down, down: up}.get(order, first)
    instead = words[1] if other == down else words[0]
    return {"words": now[0], "aria": now[1], "instead": instead, "address": urlencode({**kept, "by": other})}


def _query(text: str) -> tuple[RunQuery | None, list[str]]:
    try:
        return RunQuery.from_text(text), []
    except InvalidInput as error:
        return None, filter_words(error)


def _number(text: str) -> int | None:
    if not text:
        return None
    if not text.isdecimal() or len(text) > LONGEST_NUMBER:
        raise NotFound("this run has no such revision")
    return int(text)


urlpatterns = [
    path("projects/<slug:slug>/runs/", runs, name="runs"),
    path("projects/<slug:slug>/runs.csv", runs_as_csv, name="runs-csv"),
    path("runs/<int:run_id>/", run, name="run"),
    path("runs/<int:run_id>/seal/", seal, name="seal-run"),
]
