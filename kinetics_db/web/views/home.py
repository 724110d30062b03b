"""The projects that a person may see."""

from __future__ import annotations

from django.http import HttpResponse
from django.shortcuts import render

from kinetics_db.fits.selectors import FitCounts, fit_counts
from kinetics_db.projects.selectors import projects_visible_to
from kinetics_db.runs.selectors import run_counts
from kinetics_db.web.pages import ReadersRequest, page


@page
def home(request: ReadersRequest) -> HttpResponse:
    """Each project with its runs, its fits under way and finished, and what has gone stale."""
    runs, fits = run_counts(user=request.user), fit_counts(user=request.user)
    projects = [
        {"project": project, "runs": runs.get(project.pk, 0), "fits": fits.get(project.pk, FitCounts())}
        for project in projects_visible_to(request.user).select_related("created_by")
    ]
    return render(request, "web/home.html", {"projects": projects})
