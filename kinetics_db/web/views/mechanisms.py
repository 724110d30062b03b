"""Mechanisms: the list, writing the next version with live checks, one version."""

from __future__ import annotations

from typing import TYPE_CHECKING

from django.contrib import messages
from django.http import HttpResponse
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.selectors import verdict_counts
from kinetics_db.fits.selectors import fit_lines, fits_of_mechanisms
from kinetics_db.mechanisms.selectors import (
    mechanisms_in,
    network_of,
    version_by_id,
    versions_in,
    versions_of,
)
from kinetics_db.mechanisms.services import write_version
from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import may_contribute, project_with_role, require_contributor
from kinetics_db.web.forms import form_response, show_problem
from kinetics_db.web.mechanism_forms import MechanismForm
from kinetics_db.web.pages import ReadersRequest, action, form_page, page
from kinetics_db.web.present.fits import line_sheets
from kinetics_db.web.present.mechanisms import Checked, checked, network_sheet

if TYPE_CHECKING:
    from kinetics_db.projects.models import Project

MOST_FITS = 50


@page
def mechanisms(request: ReadersRequest, slug: str) -> HttpResponse:
    """Every mechanism with its newest version."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    listed = page_of(
        mechanisms_in(user=user, project_id=project.pk),
        order=("name", "id"),
        cursor=request.GET.get("cursor"),
    )
    fits = fits_of_mechanisms([mechanism.pk for mechanism in listed.items])
    context = {
        "project": project,
        "page": listed,
        "mechanisms": [(mechanism, fits.get(mechanism.pk, 0)) for mechanism in listed.items],
        "may_write": may_contribute(user=user, project_id=project.pk),
    }
    return render(request, "web/mechanisms/list.html", context)


@form_page
def new_mechanism(request: ReadersRequest, slug: str) -> HttpResponse:
    """Write a version; ``?from=`` begins with the text of another one."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    require_contributor(user=user, project_id=project.pk)
    form = MechanismForm(request.POST or None, initial=_begun(request, project))
    if request.method == "POST" and form.is_valid():
        before = versions_in(user=user, project_id=project.pk).order_by("-pk").values_list("pk", flat=True)
        newest = before.first() or 0
        try:
            version = write_version(user=user, project_id=project.pk, **form.cleaned_data)
        except InvalidInput as error:
            _show(form, error)
        else:
            if version.pk > newest:
                messages.success(request, f"{version} is stored.")
            else:
                messages.info(request, f"This says the same as {version}, which is here already.")
            return redirect("web:version", version.pk)
    text = str(form["text"].value() or "")
    return form_response(request, "web/mechanisms/new.html", _context(project, form, checked(text)))


def _show(form: MechanismForm, error: InvalidInput) -> None:
    """What is wrong with name and note, there; what is wrong with the text, which the checks list below it, once."""
    at_fields = [problem for problem in error.problems if problem.field in ("name", "note")]
    for problem in at_fields:
        show_problem(form, problem, rows={}, names={})
    in_text = [p for p in error.problems if p not in at_fields and p.severity == "error"]
    if in_text:
        count = "one problem" if len(in_text) == 1 else f"{len(in_text)} problems"
        form.add_error("text", f"The text has {count}: see below")


@action
def check_mechanism(request: ReadersRequest, slug: str) -> HttpResponse:
    """Check a text without storing it: the checks alone for the page itself, the whole page without scripts."""
    user = request.user
    project, _ = project_with_role(user=user, slug=slug)
    require_contributor(user=user, project_id=project.pk)
    form = MechanismForm(initial={name: request.POST.get(name, "") for name in MechanismForm.base_fields})
    context = _context(project, form, checked(request.POST.get("text", "")))
    if request.htmx:
        return render(request, "web/mechanisms/checked.html", context)
    return render(request, "web/mechanisms/new.html", context)


def _context(project: Project, form: MechanismForm, found: Checked) -> dict[str, object]:
    return {"project": project, "form": form, "checked": found}


def _begun(request: ReadersRequest, project: Project) -> dict[str, str]:
    """What a new version begins with: the text that it is to change, or a mechanism's name."""
    asked = request.GET.get("from", "")
    if not (asked.isascii() and asked.isdecimal() and len(asked) < 19):
        return {}
    version = version_by_id(user=request.user, version_id=int(asked))
    if version.mechanism.project_id != project.pk:
        return {}
    return {"name": version.mechanism.name, "text": version.text}


@page
def version(request: ReadersRequest, version_id: int) -> HttpResponse:
    """One version: what it says, where it was fitted, how many runs it explains."""
    user = request.user
    found = version_by_id(user=user, version_id=version_id)
    project = found.mechanism.project
    fits = list(fit_lines(user=user, project_id=project.pk).filter(mechanism_version=found)[: MOST_FITS + 1])
    shown = fits[:MOST_FITS]
    context = {
        "project": project,
        "version": found,
        "network": network_sheet(network_of(found)),
        "checked": checked(found.text),
        "fits": line_sheets(shown, verdict_counts(user=user, fit_ids=[fit.pk for fit in shown])),
        "more_fits": len(fits) > MOST_FITS,
        "versions": versions_of(user=user, mechanism=found.mechanism),
        "may_write": may_contribute(user=user, project_id=project.pk),
    }
    return render(request, "web/mechanisms/version.html", context)


urlpatterns = [
    path("projects/<slug:slug>/mechanisms/", mechanisms, name="mechanisms"),
    path("projects/<slug:slug>/mechanisms/new/", new_mechanism, name="new-mechanism"),
    path("projects/<slug:slug>/mechanisms/check/", check_mechanism, name="check-mechanism"),
    path("versions/<int:version_id>/", version, name="version"),
]
