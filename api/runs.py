"""Runs: found by what they were, logged, revised with If-Match, sealed."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from typing import TYPE_CHECKING, Any

from django.http import HttpResponse
from django.http.response import HttpResponseBase
from django.urls import path, reverse
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.etags import etag_of, require_match
from api.pagination import PARAMS
from api.parsers import StrictJSONParser
from api.run_shapes import (
    NewRun,
    Revision,
    RunDetail,
    RunExplanations,
    RunInList,
    RunPatch,
    plain_explanations,
    plain_revision,
    plain_row,
    plain_run,
)
from api.schema import operation
from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.explanations import explanations_of_run
from kinetics_db.measurements.rows import run_rows
from kinetics_db.projects.selectors import project_named, roles_remembered
from kinetics_db.provenance.remembered import Remembered
from kinetics_db.runs.plain import entry_from_plain, entry_to_plain
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found
from kinetics_db.runs.query_params import PARAMETERS
from kinetics_db.runs.selectors import entry_of, latest_revision, revisions_of, run_by_id, run_sheet
from kinetics_db.runs.services import log_run, revise_run, seal_run

if TYPE_CHECKING:
    from kinetics_db.runs.models import Run, RunRevision


LISTS: Remembered[tuple[bytes, str]] = Remembered(200)
"""Pages of the list as JSON with their links: runs, tables, projects, roles and accounts are all audited."""


class MergePatchParser(StrictJSONParser):
    """JSON Merge Patch (RFC 7396): what is given replaces, null takes away."""

    media_type = "application/merge-patch+json"


FILTERS = [
    *(OpenApiParameter(name, OpenApiTypes.STR, description=text) for name, text in PARAMETERS.items()),
    OpenApiParameter("order", OpenApiTypes.STR, enum=list(RUN_ORDERS), description="'newest' unless stated"),
]


class Runs(ApiView):
    """Runs of all projects that you may see."""

    @operation(
        "list_runs", tag="runs", summary="Find runs", answers=RunInList, params=FILTERS, paged=True,
        description="Everything stated must hold; without filters all runs of your projects, the newest first.",
    )  # fmt: skip
    def get(self, request: Request) -> HttpResponseBase:
        return self.remembered(request, LISTS, partial(self._found, request))

    def _found(self, request: Request) -> Response:
        query = RunQuery.from_params(request.query_params, ignore=(*PARAMS, "order"))
        order = RUN_ORDERS.get(request.query_params.get("order", "newest"))
        if order is None:
            raise InvalidInput("unknown order", field="order", cure=", ".join(RUN_ORDERS))
        runs = runs_found(user=request.user, query=query)
        return self.listed(
            request,
            runs,
            order=order,
            shown=lambda rows: [plain_row(r) for r in run_rows(rows, numbers=False)],
        )

    @operation(
        "log_run", tag="runs", summary="Log a run", status=201, takes=NewRun, answers=RunDetail, keyed=True
    )
    def post(self, request: Request) -> Response:
        plain = dict(request.data)
        body = Body({"project": plain.pop("project")} if "project" in plain else {})
        slug = body.text("project", required=True)
        body.done()
        project = project_named(user=request.user, slug=slug)
        revision = log_run(user=request.user, project_id=project.pk, entry=entry_from_plain(plain))
        location = reverse("api:run", kwargs={"run_id": revision.run_id})
        return self.created(
            plain_run(revision.run, revision), location=location, etag=run_etag(revision.run, revision)
        )


class OneRun(ApiView):
    """A run as its newest revision has it."""

    parser_classes = (StrictJSONParser, MergePatchParser)

    @operation("get_run", tag="runs", summary="A run, as its newest revision has it", answers=RunDetail)
    def get(self, request: Request, run_id: int) -> HttpResponseBase:
        self.params(request)
        run = run_by_id(user=request.user, run_id=run_id)
        latest = latest_revision(run)
        return self.conditional(request, lambda: plain_run(run, latest), etag=run_etag(run, latest))

    @operation(
        "revise_run", tag="runs", summary="Revise a run", answers=RunDetail, matched=True,
        takes={"application/merge-patch+json": RunPatch, "application/json": RunPatch},
        description="JSON Merge Patch (RFC 7396) of the entry: what is given replaces, null takes away, lists are "
        "replaced whole. A sealed run needs a reason. A patch that changes nothing makes no revision.",
    )  # fmt: skip
    def patch(self, request: Request, run_id: int) -> Response:
        run = run_by_id(user=request.user, run_id=run_id)
        latest = latest_revision(run)
        require_match(request, run_etag(run, latest))
        changes = dict(request.data)
        body = Body({"reason": changes.pop("reason")} if "reason" in changes else {})
        reason = body.text("reason")
        body.done()
        entry = entry_from_plain(merged(entry_to_plain(entry_of(latest)), changes))
        revision = revise_run(user=request.user, run=run, entry=entry, based_on=latest.number, reason=reason)
        run = run_by_id(user=request.user, run_id=run_id)
        response = Response(plain_run(run, revision))
        response["ETag"] = run_etag(run, revision)
        return response


class Revisions(ApiView):
    """What was known of a run, and when."""

    @operation(
        "list_run_revisions",
        tag="runs",
        summary="Revisions of a run, newest first",
        answers=Revision,
        paged=True,
    )
    def get(self, request: Request, run_id: int) -> Response:
        self.params(request, paged=True)
        run = run_by_id(user=request.user, run_id=run_id)
        return self.listed(
            request,
            revisions_of(run),
            order=("-number", "-id"),
            shown=lambda rows: [plain_revision(r) for r in rows],
        )


class OneRevision(ApiView):
    """The resolved snapshot that fits read."""

    @operation(
        "get_run_revision", tag="runs", summary="The resolved snapshot of a revision, as its digest is over",
        answers=OpenApiTypes.OBJECT,
    )  # fmt: skip
    def get(self, request: Request, run_id: int, number: int) -> HttpResponseBase:
        self.params(request)
        revision = run_sheet(user=request.user, run_id=run_id, number=number).revision
        return self.conditional(
            request,
            lambda: HttpResponse(bytes(revision.canonical), content_type="application/json"),
            etag_over=(revision.digest,),
            immutable=True,
        )


class Explanations(ApiView):
    """Which models explain a run."""

    @operation(
        "get_run_explanations", tag="runs", answers=RunExplanations,
        summary="Every model version that was tried on a run, with its verdict, and those that never were",
    )  # fmt: skip
    def get(self, request: Request, run_id: int) -> Response:
        self.params(request)
        with roles_remembered():
            return Response(plain_explanations(explanations_of_run(user=request.user, run_id=run_id)))


class Seal(ApiView):
    """Declares a run complete."""

    @operation(
        "seal_run", tag="runs", summary="Seal a run: later changes are amendments with a reason",
        answers=RunDetail, keyed=True, errors=(409,),
    )  # fmt: skip
    def post(self, request: Request, run_id: int) -> Response:
        Body.of(request).done()
        run = seal_run(user=request.user, run=run_by_id(user=request.user, run_id=run_id))
        latest = latest_revision(run)
        response = Response(plain_run(run, latest))
        response["ETag"] = run_etag(run, latest)
        return response


def run_etag(run: Run, latest: RunRevision) -> str:
    """Changes with every revision, and when the run is sealed."""
    return etag_of("run", run.pk, latest.number, latest.digest, run.sealed)


def merged(target: Any, patch: Any) -> Any:
    """RFC 7396, section 2. Patches are as deep as bodies may be."""
    if not isinstance(patch, Mapping):
        return patch
    found = dict(target) if isinstance(target, Mapping) else {}
    for name, value in patch.items():
        if value is None:
            found.pop(name, None)
        else:
            found[name] = merged(found.get(name), value)
    return found


urlpatterns = [
    path("runs/", Runs.as_view(), name="runs"),
    path("runs/<int:run_id>/", OneRun.as_view(), name="run"),
    path("runs/<int:run_id>/revisions/", Revisions.as_view(), name="run-revisions"),
    path("runs/<int:run_id>/revisions/<int:number>/", OneRevision.as_view(), name="run-revision"),
    path("runs/<int:run_id>/explanations/", Explanations.as_view(), name="run-explanations"),
    path("runs/<int:run_id>/seal/", Seal.as_view(), name="seal-run"),
]
