"""The OpenAPI description: what each endpoint says of itself, the description's address, and its pages to read."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import cache
from typing import Any

from csp.decorators import csp_update
from django.http import HttpResponse
from django.http.response import HttpResponseBase
from django.urls import path
from django.utils.decorators import method_decorator
from drf_spectacular.extensions import OpenApiAuthenticationExtension
from drf_spectacular.generators import SchemaGenerator
from drf_spectacular.renderers import OpenApiJsonRenderer, OpenApiYamlRenderer
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter, OpenApiResponse, extend_schema
from drf_spectacular.views import SpectacularSwaggerSplitView
from rest_framework import serializers
from rest_framework.permissions import AllowAny
from rest_framework.request import Request

from api.base import ApiView
from api.errors import MEDIA_TYPE
from api.etags import etag_of_bytes
from api.idempotency import HEADER

MEANINGS = {
    400: "The request cannot be read: broken JSON, with line and column",
    401: "No access token and not logged in, or a token that is unknown, expired or withdrawn",
    403: "The role in the project, or the token, does not allow this",
    404: "There is no such record that you may see",
    409: "In conflict with the record as it is now",
    412: "The record was changed since it was read",
    413: "The body is too large",
    415: "The body is of another media type",
    422: "The request cannot be used as it is; each problem says where and what would be accepted",
    428: "If-Match is missing",
    429: "Too many requests; Retry-After says when to come again",
}
ALWAYS = (401, 403, 404, 422, 429)
WITH_BODY = (400, 409, 413, 415)

KEY_PARAMETER = OpenApiParameter(
    HEADER,
    OpenApiTypes.STR,
    OpenApiParameter.HEADER,
    description="Any text of your own, 1 to 255 visible characters: the same request sent again with the same "
    "key within 7 days is not done twice but gets its first answer.",
)
MATCH_PARAMETER = OpenApiParameter(
    "If-Match",
    OpenApiTypes.STR,
    OpenApiParameter.HEADER,
    required=True,
    description="ETag of the record as read",
)
KNOWN_PARAMETER = OpenApiParameter(
    "If-None-Match",
    OpenApiTypes.STR,
    OpenApiParameter.HEADER,
    description="ETag that you have; 304 when it still holds",
)
PAGE_PARAMETERS = (
    OpenApiParameter("cursor", OpenApiTypes.STR, description="From a Link header; absent for the first page"),
    OpenApiParameter("size", OpenApiTypes.INT, description="Rows on a page, 1 to 200; 50 unless stated"),
)


class ProblemPlace(serializers.Serializer):
    """One thing that is wrong."""

    message = serializers.CharField()
    field = serializers.CharField(
        required=False, help_text="Path to the value, such as charges.2.amount.unit"
    )
    line = serializers.IntegerField(required=False, help_text="From 1")
    column = serializers.IntegerField(required=False, help_text="From 1")
    cure = serializers.CharField(required=False, help_text="What would be accepted")
    severity = serializers.ChoiceField(
        ["warning"], required=False, help_text="Absent for what must be mended"
    )


class ProblemDetails(serializers.Serializer):
    """RFC 9457 problem details."""

    title = serializers.CharField()
    status = serializers.IntegerField()
    detail = serializers.CharField()
    problems = ProblemPlace(many=True, required=False)


class Quantity(serializers.Serializer):
    """A number with its unit (UCUM, or as chemists write it)."""

    value = serializers.FloatField()
    unit = serializers.CharField()


class Amount(Quantity):
    """A number with its unit and its standard uncertainty in that unit."""

    uncertainty = serializers.FloatField(required=False)


def page_serializer(item: type[serializers.Serializer]) -> type[serializers.Serializer]:
    """``{"items": [...]}``; the pages beside it are in the Link header."""
    fields = {
        "items": item(many=True),
        "__doc__": "A page of a list; the pages beside it are in the Link header.",
    }
    return type(f"{item.__name__}Page", (serializers.Serializer,), fields)


def operation(
    name: str,
    *,
    tag: str,
    summary: str,
    answers: Any,
    status: int | Sequence[int] = 200,
    takes: Any = None,
    params: Sequence[OpenApiParameter] = (),
    paged: bool = False,
    keyed: bool = False,
    matched: bool = False,
    errors: Sequence[int] = (),
    media_types: Sequence[str] = ("application/json",),
    description: str = "",
) -> Callable[[Any], Any]:
    """Describe a method of a view.

    Parameters
    ----------
    name : unique name of the operation, such as 'list_runs'
    answers : serializer of the answer (with ``paged`` of one item), a type of OpenApiTypes, a mapping from media
        type to either, or None for no body
    status : of an answer that is none of an error; several where it depends
    takes : serializer of the body, or a mapping from media type to it
    keyed, matched : whether it takes an Idempotency-Key, whether it needs If-Match
    errors : further statuses than those of every request
    """
    body = page_serializer(answers) if paged else answers
    extra = [*params, *(PAGE_PARAMETERS if paged else ())]
    extra += [KEY_PARAMETER] * keyed + [MATCH_PARAMETER] * matched
    reads_body = takes is not None or keyed  # a POST without values takes an empty object, and reads it
    statuses = {*ALWAYS, *errors, *(WITH_BODY if reads_body else ()), *((412, 428) if matched else ())}
    bodies = body if isinstance(body, Mapping) else dict.fromkeys(media_types, body)
    good = [status] if isinstance(status, int) else status
    responses: dict[Any, Any] = {
        **{(code, media): one for code in good for media, one in bodies.items() if one is not None},
        **(dict.fromkeys(good) if body is None else {}),
        **{
            (code, MEDIA_TYPE): OpenApiResponse(ProblemDetails, description=MEANINGS.get(code, ""))
            for code in sorted(statuses)
        },
    }
    return extend_schema(
        operation_id=name,
        tags=[tag],
        summary=summary,
        description=description or summary,
        parameters=extra,
        request=takes,
        responses=responses,
    )


class TokenScheme(OpenApiAuthenticationExtension):
    """How a script says who it is."""

    target_class = "api.authentication.TokenAuthentication"
    name = "token"

    def get_security_definition(self, auto_schema: Any) -> dict[str, Any]:
        return {"type": "http", "scheme": "bearer", "description": "An access token of yours (rw_...)"}


@cache
def _description(form: str) -> bytes:
    """The description in one form; it is the same for everybody as long as the program runs."""
    schema = SchemaGenerator().get_schema(request=None, public=True)
    renderer = OpenApiYamlRenderer() if form == OpenApiYamlRenderer.format else OpenApiJsonRenderer()
    return bytes(renderer.render(schema, renderer_context={}))


class Schema(ApiView):
    """The description itself, as YAML or JSON; it holds no data and needs no login."""

    renderer_classes = (OpenApiYamlRenderer, OpenApiJsonRenderer)
    authentication_classes = ()
    permission_classes = (AllowAny,)

    @extend_schema(
        operation_id="get_description",
        tags=["about"],
        summary="This description (OpenAPI 3.1)",
        responses={
            (200, media_type): OpenApiTypes.STR
            for media_type in ("application/vnd.oai.openapi", "application/vnd.oai.openapi+json")
        },
    )
    def get(self, request: Request) -> HttpResponseBase:
        renderer = request.accepted_renderer
        data = _description(renderer.format)
        return self.conditional(
            request, lambda: HttpResponse(data, content_type=renderer.media_type), etag=etag_of_bytes(data)
        )


# The library that draws the page writes styles into its elements and embeds small pictures; scripts stay ours.
@method_decorator(csp_update({"style-src": ["'unsafe-inline'"]}), name="dispatch")
class Docs(ApiView, SpectacularSwaggerSplitView):
    """The description as a page to read and to try; everything it needs comes from this server."""

    permission_classes = (AllowAny,)
    url_name = "api:schema"


urlpatterns = [
    path("schema/", Schema.as_view(), name="schema"),
    path("docs/", Docs.as_view(), name="docs"),
]
