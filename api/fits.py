"""Fits: proposed, asked for, looked at while they run and after, stopped, tried again."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from django.http.response import HttpResponseBase
from django.urls import path, reverse
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.fit_shapes import (
    STATES,
    FitCurves,
    FitDetail,
    FitEvidence,
    FitInList,
    NewFit,
    ProposedFit,
    plain_curves,
    plain_fit,
    plain_line,
)
from api.queries import PROJECT, choice_in, number_in, project_in, referred
from api.schema import operation
from kinetics_db.datasets.selectors import dataset_by_id, staleness_of
from kinetics_db.engine.fitting.problem import Settings
from kinetics_db.engine.network import constant_units
from kinetics_db.engine.version import ENGINE_VERSION
from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.evidence.selectors import evidence_of, verdict_counts
from kinetics_db.fits.casting import Casting, propose_casting
from kinetics_db.fits.curves import curves_of_fit
from kinetics_db.fits.experiments import DataOfFit, data_of, experiments_of
from kinetics_db.fits.request import FitRequest
from kinetics_db.fits.selectors import fit_by_id, fit_lines, result_of
from kinetics_db.fits.services import request_fit, retry_fit, stop_fit
from kinetics_db.jobs.selectors import jobs_for
from kinetics_db.mechanisms.selectors import network_of, version_by_id
from kinetics_db.projects.selectors import project_with_role, roles_remembered

if TYPE_CHECKING:
    from collections.abc import Sequence

    from kinetics_db.datasets.models import Dataset
    from kinetics_db.fits.models import Fit
    from kinetics_db.jobs.models import Job
    from kinetics_db.mechanisms.models import MechanismVersion

SECONDS_BETWEEN_LOOKS = 2
MOST_STARTS = 10_000
"""Start values of single groups or runs, of all constants together."""


class Fits(ApiView):
    """Fits of a project."""

    @operation(
        "list_fits", tag="fits", summary="Fits of a project, the newest first", answers=FitInList, paged=True,
        params=[
            PROJECT,
            OpenApiParameter("mechanism", OpenApiTypes.STR, description="name of a mechanism"),
            OpenApiParameter("version", OpenApiTypes.INT, description="a mechanism version"),
            OpenApiParameter("dataset", OpenApiTypes.INT),
            OpenApiParameter("state", OpenApiTypes.STR, enum=STATES, description="of the background work"),
        ],
    )  # fmt: skip
    def get(self, request: Request) -> Response:
        params = self.params(request, "project", "mechanism", "version", "dataset", "state", paged=True)
        slug = project_in(params)
        chosen: dict[str, Any] = {
            "mechanism_version__mechanism__name": params.get("mechanism"),
            "mechanism_version_id": number_in(params, "version"),
            "dataset_id": number_in(params, "dataset"),
            "job_state": choice_in(params, "state", STATES) or None,
        }
        with roles_remembered():
            project, _ = project_with_role(user=request.user, slug=slug)
            fits = fit_lines(user=request.user, project_id=project.pk)
            fits = fits.filter(**{name: value for name, value in chosen.items() if value is not None})
            return self.listed(
                request, fits, order=("-created", "-id"), shown=lambda rows: _lines(request, rows)
            )

    @operation(
        "request_fit", tag="fits", status=(200, 202), takes=NewFit, answers=FitDetail, keyed=True,
        summary="Ask for a fit in the background",
        description="202 with the Location of the fit and Retry-After while it is to be computed; the same question "
        "of the same project is the same fit, so asking again gives it: 202 while it waits or runs, 200 when it has "
        "ended.",
    )  # fmt: skip
    def post(self, request: Request) -> Response:
        self.params(request)
        body = Body.of(request)
        dataset_id = body.whole("dataset", required=True)
        version_id = body.whole("mechanism_version", required=True)
        plain = _plain_request(body)
        body.done()
        asked = FitRequest.from_plain(plain)
        if sum(len(constant.starts) for constant in asked.constants) > MOST_STARTS:
            raise InvalidInput("too many start values", field="constants", cure=f"at most {MOST_STARTS:,}")
        dataset, version = _referred(request, dataset_id, version_id)
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
        return _answer(self, request, fit.pk)


class Propose(ApiView):
    """What a request can be made from."""

    @operation(
        "propose_fit", tag="fits", answers=ProposedFit,
        summary="The casting by equal names, and the constants with their units, for a dataset and a version",
        params=[
            OpenApiParameter("dataset", OpenApiTypes.INT, required=True),
            OpenApiParameter("mechanism_version", OpenApiTypes.INT, required=True),
        ],
    )  # fmt: skip
    def get(self, request: Request) -> Response:
        params = self.params(request, "dataset", "mechanism_version")
        numbers = [number_in(params, name) for name in ("dataset", "mechanism_version")]
        for name, number in zip(("dataset", "mechanism_version"), numbers, strict=True):
            if number is None:
                raise InvalidInput("is missing", field=name, cure="its number")
        with roles_remembered():
            dataset, version = _referred(request, *numbers)
            return Response(_proposal(dataset, version))


class OneFit(ApiView):
    """A fit."""

    @operation(
        "get_fit", tag="fits", answers=FitDetail,
        summary="How far a fit is, what was asked and what came out; Retry-After while it is open",
    )  # fmt: skip
    def get(self, request: Request, fit_id: int) -> HttpResponseBase:
        self.params(request)
        with roles_remembered():
            fit = fit_by_id(user=request.user, fit_id=fit_id)
            job, result, stale = _state(fit)
            response = self.conditional(
                request,
                lambda: plain_fit(fit, job, result, stale),
                etag_over=(
                    "fit", fit.pk, fit.digest, result and result.digest, stale,
                    job and (job.state, job.attempts, job.progress, job.message),
                ),
            )  # fmt: skip
        if _is_open(job):
            response["Retry-After"] = str(SECONDS_BETWEEN_LOOKS)
        return response


class Curves(ApiView):
    """Curves of a fit."""

    @operation(
        "get_fit_curves", tag="fits", answers=FitCurves,
        summary="Measured points and the model's curve for every run of a fit",
    )  # fmt: skip
    def get(self, request: Request, fit_id: int) -> HttpResponseBase:
        self.params(request)
        with roles_remembered():
            fit = fit_by_id(user=request.user, fit_id=fit_id)
            result = result_of(fit)
            if result is None:
                raise NotFound("this fit has no result yet")
            return self.conditional(
                request,
                lambda: plain_curves(fit, result, curves_of_fit(fit=fit, result=result)),
                etag_over=("curves", fit.pk, result.digest, ENGINE_VERSION),
            )


class Evidence(ApiView):
    """Evidence of a fit."""

    @operation(
        "get_fit_evidence", tag="fits", answers=FitEvidence,
        summary="The verdict on each run of a fit with its tests, and the information criteria",
    )  # fmt: skip
    def get(self, request: Request, fit_id: int) -> HttpResponseBase:
        self.params(request)
        with roles_remembered():
            evidence = evidence_of(user=request.user, fit_id=fit_id)

        def whole() -> dict[str, Any]:
            content = evidence.content
            return {
                "fit": fit_id,
                "digest": evidence.digest,
                "created": evidence.created,
                **{name: content[name] for name in ("thresholds", "model", "runs")},
            }

        return self.conditional(request, whole, etag_over=("evidence", fit_id, evidence.digest))


class Stop(ApiView):
    """Stops a fit."""

    @operation(
        "stop_fit", tag="fits", status=(200, 202), answers=FitDetail, keyed=True, errors=(409,),
        summary="Ask a fit to stop; its best point so far is kept",
        description="202 while it is still running, 200 when it had not begun and is stopped at once.",
    )  # fmt: skip
    def post(self, request: Request, fit_id: int) -> Response:
        self.params(request)
        Body.of(request).done()
        stop_fit(user=request.user, fit=fit_by_id(user=request.user, fit_id=fit_id))
        return _answer(self, request, fit_id)


class Retry(ApiView):
    """Computes a fit again."""

    @operation(
        "retry_fit", tag="fits", status=202, answers=FitDetail, keyed=True, errors=(409,),
        summary="Compute a fit again that was stopped, failed or crashed",
    )  # fmt: skip
    def post(self, request: Request, fit_id: int) -> Response:
        self.params(request)
        Body.of(request).done()
        retry_fit(user=request.user, fit=fit_by_id(user=request.user, fit_id=fit_id))
        return _answer(self, request, fit_id)


def _plain_request(body: Body) -> dict[str, Any]:
    """A request as `FitRequest.from_plain` reads it, with what was left out."""
    casting = body.part("casting")
    maps = {name: casting.named(name) if casting else {} for name in ("compounds", "columns")}
    return {
        "casting": maps,
        "constants": [part.values for part in _parts(body, "constants")],
        "start_concentrations": [part.values for part in _parts(body, "start_concentrations")],
        "settings": body.named("settings"),
        "without_owners": body.texts("without_owners"),
    }


def _parts(body: Body, name: str) -> list[Body]:
    """Objects whose names are the matter of `FitRequest`."""
    parts = body.objects(name)
    for part in parts:
        part.known.update(part.values)
    return parts


def _referred(
    request: Request, dataset_id: int | None, version_id: int | None
) -> tuple[Dataset, MechanismVersion]:
    user = request.user
    dataset = referred("dataset", dataset_id, lambda pk: dataset_by_id(user=user, dataset_id=pk))
    version = referred("mechanism_version", version_id, lambda pk: version_by_id(user=user, version_id=pk))
    if version.mechanism.project_id != dataset.project_id:
        raise InvalidInput("the mechanism is of another project", field="mechanism_version")
    return dataset, version


def _proposal(dataset: Dataset, version: MechanismVersion) -> dict[str, Any]:
    network, data = network_of(version), data_of(dataset)
    casting = propose_casting(network, compounds=data.compounds, columns=data.columns)
    concentration = "mol/L" if dataset.basis == "mol/L" else "percent"
    units = constant_units(network, concentration=concentration)
    return {
        "dataset": dataset.pk,
        "mechanism_version": version.pk,
        "casting": casting.to_plain(),
        "undecided": {
            "compounds": [name for name in data.compounds if name not in casting.compounds],
            "columns": [name for name in data.columns if name not in casting.columns],
        },
        "species": list(network.species),
        "observables": list(network.observable_names),
        "constants": [{"name": name, "unit": units[name]} for name in network.constants],
        "concentration_unit": concentration,
        "settings": asdict(Settings()),
        "owners": _owners(data),
    }


def _owners(data: DataOfFit) -> list[str]:
    """Owners of every cause of error, whoever plays a part."""
    every = Casting({name: name for name in data.compounds}, {name: name for name in data.columns})
    _, nuisances = experiments_of(data, every)
    return list(dict.fromkeys(nuisance.owner for nuisance in nuisances))


def _lines(request: Request, fits: Sequence[Fit]) -> list[dict[str, Any]]:
    counts = verdict_counts(user=request.user, fit_ids=[fit.pk for fit in fits])
    return [plain_line(fit, counts.get(fit.pk, {})) for fit in fits]


def _state(fit: Fit) -> tuple[Job | None, Any, tuple[str, ...]]:
    job = jobs_for(kind="fit", subject_ids=[fit.pk]).get(fit.pk)
    return job, result_of(fit), staleness_of([fit.dataset_id])[fit.dataset_id].reasons


def _is_open(job: Job | None) -> bool:
    return job is not None and job.state in job.OPEN


def _answer(view: ApiView, request: Request, fit_id: int) -> Response:
    """202 while there is something to wait for, else 200."""
    fit = fit_by_id(user=request.user, fit_id=fit_id)
    job, result, stale = _state(fit)
    plain = plain_fit(fit, job, result, stale)
    location = reverse("api:fit", kwargs={"fit_id": fit.pk})
    if _is_open(job):
        return view.accepted(plain, location=location, retry_after=SECONDS_BETWEEN_LOOKS)
    return view.created(plain, location=location, status=200)


urlpatterns = [
    path("fits/", Fits.as_view(), name="fits"),
    path("fits/propose/", Propose.as_view(), name="propose-fit"),
    path("fits/<int:fit_id>/", OneFit.as_view(), name="fit"),
    path("fits/<int:fit_id>/curves/", Curves.as_view(), name="fit-curves"),
    path("fits/<int:fit_id>/evidence/", Evidence.as_view(), name="fit-evidence"),
    path("fits/<int:fit_id>/stop/", Stop.as_view(), name="stop-fit"),
    path("fits/<int:fit_id>/retry/", Retry.as_view(), name="retry-fit"),
]
