"""Mechanisms: listed, written as versions, read as text, checked without storing."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from django.http import HttpResponse
from django.http.response import HttpResponseBase
from django.urls import path, reverse
from drf_spectacular.types import OpenApiTypes
from rest_framework.renderers import BaseRenderer, JSONRenderer
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.etags import etag_of
from api.mechanism_shapes import (
    CheckedText,
    NewMechanism,
    NewVersion,
    ShownMechanism,
    TextToCheck,
    VersionDetail,
    VersionInList,
    plain_checked,
    plain_mechanism,
    plain_version,
    plain_version_detail,
)
from api.queries import PROJECT, newest, problems_in_text, project_in
from api.schema import operation
from kinetics_db.engine.network import parse_mechanism
from kinetics_db.errors import InvalidInput
from kinetics_db.mechanisms.selectors import (
    mechanism_by_id,
    mechanisms_in,
    version_by_id,
    versions_in,
    versions_of,
)
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.selectors import project_named, project_with_role, roles_remembered

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User


class TextRenderer(BaseRenderer):
    """A text as it was typed."""

    media_type = "text/plain"
    format = "txt"
    charset = "utf-8"

    def render(self, data: Any, *args: Any, **kwargs: Any) -> bytes:
        return str(data).encode()


class Mechanisms(ApiView):
    """Mechanisms of a project."""

    @operation(
        "list_mechanisms", tag="mechanisms", summary="Mechanisms of a project by name, each with its newest version",
        answers=ShownMechanism, params=[PROJECT], paged=True,
    )  # fmt: skip
    def get(self, request: Request) -> Response:
        slug = project_in(self.params(request, "project", paged=True))
        with roles_remembered():
            project, _ = project_with_role(user=request.user, slug=slug)
            mechanisms = mechanisms_in(user=request.user, project_id=project.pk)
            return self.listed(
                request,
                mechanisms,
                order=("name", "id"),
                shown=lambda rows: [plain_mechanism(m) for m in rows],
            )

    @operation(
        "write_mechanism", tag="mechanisms", status=(200, 201), takes=NewMechanism, answers=VersionDetail,
        keyed=True, summary="Store a text as the next version of the named mechanism, which begins with its first",
        description="201 with the Location of the version, 200 with the version that says the same already.",
    )  # fmt: skip
    def post(self, request: Request) -> Response:
        self.params(request)
        body = Body.of(request)
        slug, name = body.text("project", required=True), body.text("name", required=True)
        text, note = body.text("text", required=True), body.text("note")
        body.done()
        project = project_named(user=request.user, slug=slug)
        return _written(self, request.user, project.pk, name, text, note)


class Versions(ApiView):
    """Versions of a mechanism."""

    @operation(
        "list_versions", tag="mechanisms", summary="Versions of a mechanism, the newest first, without their texts",
        answers=VersionInList, paged=True,
    )  # fmt: skip
    def get(self, request: Request, mechanism_id: int) -> Response:
        self.params(request, paged=True)
        with roles_remembered():
            mechanism = mechanism_by_id(user=request.user, mechanism_id=mechanism_id)
            versions = versions_of(user=request.user, mechanism=mechanism).defer("canonical", "text")
            return self.listed(
                request,
                versions,
                order=("-number", "-id"),
                shown=lambda rows: [plain_version(v) for v in rows],
            )

    @operation(
        "write_version", tag="mechanisms", status=(200, 201), takes=NewVersion, answers=VersionDetail, keyed=True,
        summary="Store a text as the next version of a mechanism",
        description="201 with the Location of the version, 200 with the version that says the same already.",
    )  # fmt: skip
    def post(self, request: Request, mechanism_id: int) -> Response:
        self.params(request)
        body = Body.of(request)
        text, note = body.text("text", required=True), body.text("note")
        body.done()
        mechanism = mechanism_by_id(user=request.user, mechanism_id=mechanism_id)
        return _written(self, request.user, mechanism.project_id, mechanism.name, text, note)


class OneVersion(ApiView):
    """A version."""

    renderer_classes = (JSONRenderer, TextRenderer)

    @operation(
        "get_version", tag="mechanisms", summary="A mechanism version; as text/plain its text",
        answers={"application/json": VersionDetail, "text/plain": OpenApiTypes.STR},
    )  # fmt: skip
    def get(self, request: Request, version_id: int) -> HttpResponseBase:
        self.params(request)
        version = version_by_id(user=request.user, version_id=version_id)
        if request.accepted_renderer.format == TextRenderer.format:
            return self.conditional(
                request,
                lambda: HttpResponse(version.text, content_type="text/plain; charset=utf-8"),
                etag=etag_of("text", version.pk, version.text),
                immutable=True,
            )
        return self.conditional(
            request, lambda: plain_version_detail(version), etag_over=("version", version.pk, version.digest)
        )


class Check(ApiView):
    """Checks a text."""

    writes = False

    @operation(
        "check_mechanism", tag="mechanisms", takes=TextToCheck, answers=CheckedText,
        summary="What is wrong with a text, with line and column, or what it says; nothing is kept",
    )  # fmt: skip
    def post(self, request: Request) -> Response:
        self.params(request)
        body = Body.of(request)
        text = body.text("text", required=True)
        body.done()
        try:
            network = parse_mechanism(text)
        except InvalidInput as error:
            return Response(plain_checked(error.problems, None))
        return Response(plain_checked(network.warnings, network))


def _written(view: ApiView, user: User, project_id: int, name: str, text: str, note: str) -> Response:
    before = newest(versions_in(user=user, project_id=project_id))
    with problems_in_text():
        made = write_version(user=user, project_id=project_id, name=name, text=text, note=note)
    version = version_by_id(user=user, version_id=made.pk)
    return view.created(
        plain_version_detail(version),
        location=reverse("api:version", kwargs={"version_id": version.pk}),
        status=201 if version.pk > before else 200,
    )


urlpatterns = [
    path("mechanisms/", Mechanisms.as_view(), name="mechanisms"),
    path("mechanisms/check/", Check.as_view(), name="check-mechanism"),
    path("mechanisms/<int:mechanism_id>/versions/", Versions.as_view(), name="versions"),
    path("versions/<int:version_id>/", OneVersion.as_view(), name="version"),
]
