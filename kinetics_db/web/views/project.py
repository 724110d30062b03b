"""A project at a glance: what to do next, what is under way, what the evidence says, the newest runs and fits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from django.http import HttpResponse
from django.shortcuts import render
from django.urls import path, reverse
from django_htmx.http import HttpResponseClientRefresh

from kinetics_db.datasets.selectors import datasets_in
from kinetics_db.evidence.selectors import grid_columns, verdict_counts
from kinetics_db.fits.selectors import fit_lines, fits_under_way
from kinetics_db.materials.selectors import compounds_in
from kinetics_db.measurements.rows import run_rows
from kinetics_db.measurements.selectors import current_tables_in
from kinetics_db.measurements.waiting import Waiting, waiting_in
from kinetics_db.mechanisms.selectors import mechanisms_in
from kinetics_db.projects.selectors import project_with_role
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found
from kinetics_db.web.pages import ReadersRequest, page
from kinetics_db.web.present.fits import line_sheets
from kinetics_db.web.present.grid import summary_lines
from kinetics_db.web.present.run_list import run_list

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.projects.models import Project

SECONDS_BETWEEN_LOOKS = 2
MOST_UNDER_WAY = 10
MOST_VERSIONS = 6
MOST_RUNS = 8
MOST_FITS = 5


@page
def project(request: ReadersRequest, slug: str) -> HttpResponse:
    """The newest of everything, the same amount of work however large the project is.

    ``?hold`` keeps the page as it is while fits are under way.
    """
    user = request.user
    found, role = project_with_role(user=user, slug=slug)
    runs = runs_found(user=user, query=RunQuery(), project_id=found.pk).order_by(*RUN_ORDERS["newest"])
    rows = run_rows(runs[:MOST_RUNS])
    waiting = waiting_in(user=user, project_id=found.pk)
    chosen = grid_columns(user=user, project_id=found.pk, most=MOST_VERSIONS)
    fits = list(fit_lines(user=user, project_id=found.pk)[:MOST_FITS])
    judged = {column.fit_id for column in chosen.columns} | {fit.pk for fit in fits}
    counts = verdict_counts(user=user, fit_ids=sorted(judged))
    context = {
        "project": found,
        "role": role,
        "may_write": role != "reader",
        "steps": [] if fits else first_steps(user=user, project=found, has_runs=bool(rows), waiting=waiting),
        "evidence": summary_lines(chosen.columns, counts),
        "older": chosen.left_out,
        "runs": run_list(rows),
        "waiting": waiting,
        "waiting_more": max(0, waiting.for_file + waiting.for_reduction - len(waiting.newest)),
        "fits": line_sheets(fits, counts),
        **_under_way(user, found, held="hold" in request.GET),
    }
    return render(request, "web/project.html", context)


@page
def under_way(request: ReadersRequest, slug: str) -> HttpResponse:
    """The part of the page that follows the fits; the whole page anew when one has ended or begun."""
    found, _ = project_with_role(user=request.user, slug=slug)
    context = _under_way(request.user, found, held=False)
    if str(context["open"]) != request.GET.get("open"):
        return HttpResponseClientRefresh()
    return render(request, "web/project/under_way.html", {"project": found, **context})


def _under_way(user: User, project: Project, *, held: bool) -> dict[str, object]:
    fits = list(fits_under_way(user=user, project_id=project.pk)[: MOST_UNDER_WAY + 1])
    return {
        "under_way": line_sheets(fits[:MOST_UNDER_WAY], {}),
        "more_under_way": len(fits) > MOST_UNDER_WAY,
        "open": "-".join(str(fit.pk) for fit in fits),
        "held": held,
        "seconds": SECONDS_BETWEEN_LOOKS,
    }


@dataclass(frozen=True)
class Step:
    """One step of a new project; ``address`` is where it is taken."""

    words: str
    address: str
    is_done: bool
    is_next: bool = False


def first_steps(*, user: User, project: Project, has_runs: bool, waiting: Waiting) -> list[Step]:
    """The way from an empty project to its first fit, and how far it has been gone."""
    scope: dict[str, Any] = {"user": user, "project_id": project.pk}
    tabulated = has_runs and current_tables_in(**scope).exists()
    filed = tabulated or waiting.for_reduction > 0
    entered = has_runs or compounds_in(**scope).exists()
    first_waiting = waiting.newest[0].pk if waiting.newest else None
    a_run = reverse("web:run", args=[first_waiting]) if first_waiting else _address("runs", project)
    a_file = reverse("web:new-file", args=[first_waiting]) if first_waiting else _address("runs", project)
    steps = (
        (
            "Enter the compounds, and the lots and stocks that you weigh from",
            _address("materials", project),
            entered,
        ),
        ("Log a run with its charges", _address("new-run", project), has_runs),
        ("Give the run its instrument file", a_file, filed),
        ("Reduce its signals to concentrations", a_run, tabulated),
        ("Write a mechanism", _address("new-mechanism", project), mechanisms_in(**scope).exists()),
        (
            "Freeze concentration tables into a dataset",
            _address("new-dataset", project),
            datasets_in(**scope).exists(),
        ),
        ("Ask for a fit of the mechanism to the dataset", _address("new-fit", project), False),
    )
    undone = next(number for number, step in enumerate(steps) if not step[2])
    return [Step(*step, is_next=number == undone) for number, step in enumerate(steps)]


def _address(name: str, project: Project) -> str:
    return reverse(f"web:{name}", args=[project.slug])


urlpatterns = [
    path("projects/<slug:slug>/", project, name="project"),
    path("projects/<slug:slug>/under-way/", under_way, name="under-way"),
]
