"""Fits: the list, one fit while it runs and after, its numbers as files."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING, Any

from django.contrib import messages
from django.http import HttpResponse, HttpResponseBase
from django.shortcuts import redirect, render
from django.urls import path
from django_htmx.http import HttpResponseClientRefresh

from kinetics_db.datasets.selectors import staleness_of
from kinetics_db.errors import NotFound
from kinetics_db.evidence.selectors import evidence_of, verdict_counts
from kinetics_db.fits.experiments import DataOfFit, data_of
from kinetics_db.fits.selectors import fit_by_id, fit_lines, result_of
from kinetics_db.fits.services import retry_fit, stop_fit
from kinetics_db.jobs.selectors import jobs_for
from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import NOT_VISIBLE, may_contribute, project_with_role
from kinetics_db.web.csv_files import csv_file
from kinetics_db.web.pages import ReadersRequest, action, page
from kinetics_db.web.present.asked import asked_of
from kinetics_db.web.present.fit_charts import charts_of_runs
from kinetics_db.web.present.fits import (
    MOST_PULLS,
    correlation_sheet,
    criteria_of,
    line_sheets,
    minima_sheet,
    pull_lines,
    run_sheets_of_fit,
    sigma_lines,
    verdicts_text,
)
from kinetics_db.web.present.models import fit_sheet
from kinetics_db.web.present.units import PERCENT
from kinetics_db.web.views.fit_request import urlpatterns as request_patterns

if TYPE_CHECKING:
    from kinetics_db.fits.models import Fit, FitResult
    from kinetics_db.jobs.models import Job

SECONDS_BETWEEN_LOOKS = 3
CHARTS_AT_ONCE = 3
"""Charts of so many runs come with the page; the others when they are scrolled to."""
MOST_REASONS = 10
CONSTANT_COLUMNS = (
    "name", "kind", "place", "value", "standard_error", "lower", "upper", "unit", "scale", "determined",
    "at_bound", "set_by_prior", "why_not",
)  # fmt: skip
POINT_COLUMNS = (
    "run",
    "time_s",
    "observable",
    "observed",
    "model",
    "standard_uncertainty",
    "standardised_residual",
)


@page
def fits(request: ReadersRequest, slug: str) -> HttpResponse:
    """Fits of a project, newest first."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    listed = page_of(
        fit_lines(user=user, project_id=project.pk),
        order=("-created", "-id"),
        cursor=request.GET.get("cursor"),
    )
    counts = verdict_counts(user=user, fit_ids=[fit.pk for fit in listed.items])
    context = {
        "project": project,
        "page": listed,
        "fits": line_sheets(listed.items, counts),
        "may_write": may_contribute(user=user, project_id=project.pk),
    }
    return render(request, "web/fits/list.html", context)


@page
def fit(request: ReadersRequest, fit_id: int) -> HttpResponse:
    """One fit: how far it is, or what came out of it."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    result = result_of(found)
    job = jobs_for(kind="fit", subject_ids=[found.pk]).get(found.pk)
    content = result.content if result is not None else {}
    stale = staleness_of([found.dataset_id])[found.dataset_id]
    context = {
        **_heading(request, found, job, result, content),
        "asked": asked_of(found.content),
        "stale": stale.reasons[:MOST_REASONS],
        "further_stale": max(0, len(stale.reasons) - MOST_REASONS),
        "refresh": SECONDS_BETWEEN_LOOKS,
    }
    if result is not None and content.get("experiments"):
        context |= _outcome(request, found, result, content)
    return render(request, "web/fits/fit.html", context)


def _heading(
    request: ReadersRequest,
    found: Fit,
    job: Job | None,
    result: FitResult | None,
    content: dict[str, Any],
) -> dict[str, Any]:
    """What both the page and its live part need."""
    return {
        "project": found.project,
        "fit": found,
        "job": job,
        "result": result,
        "sheet": fit_sheet(found, job, result, {result.pk: content} if result is not None else {}),
        "content": content,
        "may_write": may_contribute(user=request.user, project_id=found.project_id),
        "may_retry": job is not None
        and job.state in (job.State.STOPPED, job.State.FAILED, job.State.CRASHED),
    }


def _outcome(
    request: ReadersRequest, found: Fit, result: FitResult, content: Mapping[str, Any]
) -> dict[str, Any]:
    """Everything that a fit with a best point has to show."""
    data = data_of(found.dataset)
    evidence = evidence_of(user=request.user, fit_id=found.pk).content
    runs = run_sheets_of_fit(data, evidence)
    pulls = pull_lines(content)
    counts: dict[str, int] = {}
    for run in runs:
        counts[run.verdict] = counts.get(run.verdict, 0) + 1
    at_once = range(1, min(CHARTS_AT_ONCE, len(runs)) + 1)
    return {
        "runs": runs,
        "charts": charts_of_runs(found, result, content, data, at_once),
        "verdicts": verdicts_text(counts),
        "criteria": criteria_of(evidence["model"]),
        "pulls": pulls[:MOST_PULLS],
        "more_pulls": pulls[MOST_PULLS:],
        "far_pulls": sum(pull.far for pull in pulls),
        "sigmas": sigma_lines(content, _unit(found)),
        "minima": minima_sheet(content),
        "correlations": correlation_sheet(content),
    }


def _unit(found: Fit) -> str:
    return "mol/L" if found.dataset.basis == "mol/L" else PERCENT


@page
def fit_progress(request: ReadersRequest, fit_id: int) -> HttpResponse:
    """How far a fit is, for the page that shows it: a fragment while it runs, then a fresh page."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    job = jobs_for(kind="fit", subject_ids=[found.pk]).get(found.pk)
    if not request.htmx:
        return redirect("web:fit", found.pk)
    if job is None or job.state not in job.OPEN:
        return HttpResponseClientRefresh()
    return render(request, "web/fits/under_way.html", _heading(request, found, job, None, {}))


@page
def fit_run(request: ReadersRequest, fit_id: int, position: int) -> HttpResponse:
    """Tests and charts of one run of a fit, as a part of its page or, without scripts, as a page."""
    found, result, content, data = _finished(request, fit_id)
    runs = run_sheets_of_fit(data, evidence_of(user=request.user, fit_id=found.pk).content)
    if not 1 <= position <= len(runs):
        raise NotFound(NOT_VISIBLE)
    context = {
        "project": found.project,
        "fit": found,
        "run": runs[position - 1],
        "charts": charts_of_runs(found, result, content, data, [position]),
        "basis_unit": _unit(found),
    }
    template = "web/fits/run.html" if request.htmx else "web/fits/run_page.html"
    return render(request, template, context)


def _finished(request: ReadersRequest, fit_id: int) -> tuple[Fit, FitResult, dict[str, Any], DataOfFit]:
    """A fit with a best point; NotFound while it has none."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    result = result_of(found)
    content = result.content if result is not None else {}
    if result is None or not content.get("experiments"):
        raise NotFound("this fit has no result yet")
    return found, result, content, data_of(found.dataset)


@action
def stop(request: ReadersRequest, fit_id: int) -> HttpResponse:
    """Ask the fit to stop."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    stop_fit(user=request.user, fit=found)
    messages.success(request, "The fit was asked to stop. Its best point so far is kept.")
    return redirect("web:fit", found.pk)


@action
def retry(request: ReadersRequest, fit_id: int) -> HttpResponse:
    """Compute a fit again that was stopped, failed or crashed."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    retry_fit(user=request.user, fit=found)
    messages.success(request, "The fit is computed again.")
    return redirect("web:fit", found.pk)


@page
def constants_csv(request: ReadersRequest, fit_id: int) -> HttpResponseBase:
    """Every fitted number with its interval, nuisance parameters too."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    content = _content(found)
    rows = ([parameter[name] for name in CONSTANT_COLUMNS] for parameter in content["parameters"])
    return csv_file(f"fit-{found.pk}-constants.csv", CONSTANT_COLUMNS, rows)


@page
def residuals_csv(request: ReadersRequest, fit_id: int) -> HttpResponseBase:
    """Every fitted point beside the model."""
    found = fit_by_id(user=request.user, fit_id=fit_id)
    columns = (
        *POINT_COLUMNS[:3],
        *(f"{name}_{_unit_in_name(found)}" for name in POINT_COLUMNS[3:6]),
        POINT_COLUMNS[6],
    )
    return csv_file(f"fit-{found.pk}.csv", columns, _points(_content(found)))


def _unit_in_name(found: Fit) -> str:
    return "mol_per_L" if found.dataset.basis == "mol/L" else "percent"


def _content(found: Fit) -> dict[str, Any]:
    result = result_of(found)
    if result is None:
        raise NotFound("this fit has no result yet")
    return result.content


def _points(content: Mapping[str, Any]) -> Iterator[tuple[object, ...]]:
    for experiment in content["experiments"]:
        for column, observable in enumerate(experiment["observed_names"]):
            for row, time in enumerate(experiment["times"]):
                values = (
                    experiment[name][row][column] for name in ("observed", "model", "sigma", "standardised")
                )
                yield (experiment["name"], time, observable, *values)


urlpatterns = [
    path("projects/<slug:slug>/fits/", fits, name="fits"),
    *request_patterns,
    path("fits/<int:fit_id>/", fit, name="fit"),
    path("fits/<int:fit_id>/progress/", fit_progress, name="fit-progress"),
    path("fits/<int:fit_id>/runs/<int:position>/", fit_run, name="fit-run"),
    path("fits/<int:fit_id>/stop/", stop, name="stop-fit"),
    path("fits/<int:fit_id>/retry/", retry, name="retry-fit"),
    path("fits/<int:fit_id>.csv", residuals_csv, name="fit-residuals-csv"),
    path("fits/<int:fit_id>/constants.csv", constants_csv, name="fit-constants-csv"),
]
