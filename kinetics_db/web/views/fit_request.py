"""Asking for a fit: first which dataset and mechanism version, then the casting, the constants and the settings."""

from __future__ import annotations

from typing import TYPE_CHECKING

from django import forms
from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import path

from kinetics_db.datasets.selectors import dataset_by_id, datasets_in
from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.fits.experiments import data_of
from kinetics_db.fits.request import FitRequest
from kinetics_db.fits.selectors import fit_by_id, fit_lines
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.selectors import network_of, version_by_id, versions_in
from kinetics_db.projects.selectors import NOT_VISIBLE, project_named, require_contributor
from kinetics_db.web.fit_request_form import FitRequestForm, too_large
from kinetics_db.web.forms import PlainForm, form_response
from kinetics_db.web.pages import ReadersRequest, form_page

if TYPE_CHECKING:
    from kinetics_db.datasets.models import Dataset
    from kinetics_db.fits.models import Fit
    from kinetics_db.mechanisms.models import MechanismVersion
    from kinetics_db.projects.models import Project

MOST_CHOICES = 500
LONGEST_ID = 18


class ChoiceForm(PlainForm):
    """Which dataset by which mechanism version."""

    dataset = forms.ChoiceField(required=False, label="Dataset")
    version = forms.ChoiceField(required=False, label="Mechanism version")


@form_page
def new_fit(request: ReadersRequest, slug: str) -> HttpResponse:
    """Ask for a fit. ``?dataset=`` and ``?version=`` choose what is fitted, ``?like=`` an earlier fit to begin with."""
    user = request.user
    project = project_named(user=user, slug=slug)
    require_contributor(user=user, project_id=project.pk)
    like = _like(request, project)
    dataset, version = _dataset(request, project, like), _version(request, project, like)
    context = {
        "project": project,
        "like": like,
        "dataset": dataset,
        "version": version,
        "choice": _choice(request, project, dataset, version),
    }
    if dataset is None or version is None:
        return render(request, "web/fits/new.html", context)
    network = network_of(version)
    if reason := too_large(network):
        return render(request, "web/fits/new.html", {**context, "too_large": reason})
    form = FitRequestForm(
        request.POST if request.method == "POST" else None,
        network=network,
        found=data_of(dataset),
        basis=dataset.basis,
        like=FitRequest.from_plain(like.content) if like else None,
    )
    if request.method == "POST" and (asked := form.request()) is not None:
        try:
            return _asked(request, project, dataset, version, asked)
        except InvalidInput as error:
            form.show(error)
    return form_response(request, "web/fits/new.html", {**context, "form": form})


def _asked(
    request: ReadersRequest, project: Project, dataset: Dataset, version: MechanismVersion, asked: FitRequest
) -> HttpResponse:
    newest = fit_lines(user=request.user, project_id=project.pk).order_by("-pk").values_list("pk", flat=True)
    before = newest.first() or 0
    fit = request_fit(
        user=request.user,
        dataset=dataset,
        mechanism_version=version,
        constants=asked.constants,
        casting=asked.casting,
        start_concentrations=asked.start_concentrations,
        settings=asked.settings,
        without_owners=asked.without_owners,
    )
    if fit.pk > before:
        messages.success(request, "The fit is asked for. It is computed in the background.")
    else:
        messages.info(request, "The same fit has been asked for before. Here it is.")
    return redirect("web:fit", fit.pk)


def _id(request: HttpRequest, name: str) -> int | None:
    """A record's number in the address; None where there is none."""
    text = request.GET.get(name, "")
    return int(text) if text.isascii() and text.isdecimal() and len(text) <= LONGEST_ID else None


def _like(request: ReadersRequest, project: Project) -> Fit | None:
    number = _id(request, "like")
    fit = fit_by_id(user=request.user, fit_id=number) if number is not None else None
    _of_project(fit.project_id if fit else project.pk, project)
    return fit


def _dataset(request: ReadersRequest, project: Project, like: Fit | None) -> Dataset | None:
    number = _id(request, "dataset")
    if number is None:
        return like.dataset if like else None
    dataset = dataset_by_id(user=request.user, dataset_id=number)
    _of_project(dataset.project_id, project)
    return dataset


def _version(request: ReadersRequest, project: Project, like: Fit | None) -> MechanismVersion | None:
    number = _id(request, "version")
    if number is None:
        return like.mechanism_version if like else None
    version = version_by_id(user=request.user, version_id=number)
    _of_project(version.mechanism.project_id, project)
    return version


def _of_project(project_id: int, project: Project) -> None:
    if project_id != project.pk:
        raise NotFound(NOT_VISIBLE)


def _choice(
    request: ReadersRequest, project: Project, dataset: Dataset | None, version: MechanismVersion | None
) -> ChoiceForm:
    datasets = list(datasets_in(user=request.user, project_id=project.pk)[:MOST_CHOICES])
    versions = list(
        versions_in(user=request.user, project_id=project.pk)
        .defer("canonical", "text")
        .order_by("-created", "-pk")[:MOST_CHOICES]
    )
    form = ChoiceForm(
        initial={"dataset": dataset.pk if dataset else "", "version": version.pk if version else ""}
    )
    for name, records, chosen in (("dataset", datasets, dataset), ("version", versions, version)):
        known = {record.pk: str(record) for record in records}
        if chosen is not None:
            known.setdefault(chosen.pk, str(chosen))
        form.fields[name].choices = [("", "choose …"), *known.items()]  # type: ignore[attr-defined]
    return form


urlpatterns = [path("projects/<slug:slug>/fits/new/", new_fit, name="new-fit")]
