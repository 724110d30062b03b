"""The projects that a person may see, where he or she left off, and making a project."""

from __future__ import annotations

from django import forms
from django.contrib import messages
from django.http import HttpResponse
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.fits.selectors import FitCounts, fit_counts
from kinetics_db.measurements.waiting import RunCounts, run_counts, runs_left_off
from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import free_slug, projects_with_roles
from kinetics_db.projects.services import create_project
from kinetics_db.web.forms import PlainForm, form_response, problems_shown
from kinetics_db.web.pages import ReadersRequest, form_page, page


@page
def home(request: ReadersRequest) -> HttpResponse:
    """Each project with what waits for somebody, and the runs that the person logged last."""
    found = page_of(
        projects_with_roles(user=request.user), order=("slug", "id"), cursor=request.GET.get("cursor")
    )
    runs, fits = run_counts(user=request.user), fit_counts(user=request.user)
    projects = [
        {
            "project": project,
            "runs": runs.get(project.pk, RunCounts()),
            "fits": fits.get(project.pk, FitCounts()),
        }
        for project in found.items
    ]
    left_off = runs_left_off(user=request.user)
    return render(request, "web/home.html", {"page": found, "projects": projects, "left_off": left_off})


class ProjectForm(PlainForm):
    """A new project."""

    name = forms.CharField(
        label="Name", required=False, help_text="As it stands over every page of the project."
    )
    slug = forms.CharField(
        label="Short name",
        required=False,
        widget=forms.TextInput(attrs={"spellcheck": "false", "autocapitalize": "none"}),
        help_text="For addresses: small letters, digits and hyphens. Made from the name when left empty; it stays.",
    )
    description = forms.CharField(
        label="What it is about",
        required=False,
        widget=forms.Textarea(attrs={"rows": 5}),
        help_text="The reaction, the question, who works on it.",
    )


@form_page
def new_project(request: ReadersRequest) -> HttpResponse:
    """Make a project; whoever makes it owns it."""
    form = ProjectForm(request.POST if request.method == "POST" else None)
    if form.is_bound and form.is_valid():
        with problems_shown(form):
            given = form.cleaned_data
            slug = given["slug"] or free_slug(name=given["name"])
            made = create_project(
                user=request.user, slug=slug, name=given["name"], description=given["description"]
            )
            messages.success(request, f"The project '{made.name}' is made, and you own it.")
            return redirect("web:project", made.slug)
    return form_response(request, "web/home/new_project.html", {"form": form})


urlpatterns = [
    path("", home, name="home"),
    path("projects/new/", new_project, name="new-project"),
]
