"""What every endpoint stands on: limits, clean queries, keys, pages, ETags. An endpoint parses, calls, formats."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from functools import partial
from typing import Any

from django.http.response import HttpResponse, HttpResponseBase
from django.utils.cache import patch_vary_headers
from rest_framework.exceptions import AuthenticationFailed, NotAuthenticated
from rest_framework.renderers import JSONRenderer
from rest_framework.request import Request
from rest_framework.response import Response
from rest_framework.views import APIView

from api import idempotency
from api.errors import MEDIA_TYPE
from api.etags import CHECKED, IMMUTABLE, etag_of, etag_of_bytes, is_known
from api.pagination import PARAMS, link_header, requested_page
from api.parsers import unstorable
from kinetics_db.errors import InvalidInput, NotFound, Problem
from kinetics_db.provenance.remembered import Remembered
from kinetics_db.provenance.selectors import head_of_record


class ApiView(APIView):
    """Common behaviour of the endpoints.

    ``writes`` says whether a POST changes the record, and so takes an Idempotency-Key.
    """

    writes = True
    post: Callable[..., HttpResponseBase]

    def initial(self, request: Request, *args: Any, **kwargs: Any) -> None:
        try:
            super().initial(request, *args, **kwargs)
        except (NotAuthenticated, AuthenticationFailed):
            self.check_throttles(request)  # by address, so that secrets cannot be tried without end
            raise
        _require_clean_address(request, kwargs)
        if request.method == "POST" and self.writes and idempotency.HEADER in request.headers:
            # This object serves one request; its own `post` is wrapped for it.
            self.__dict__["post"] = partial(idempotency.answered_once, self.post)

    def finalize_response(
        self, request: Request, response: HttpResponseBase, *args: Any, **kwargs: Any
    ) -> HttpResponseBase:
        described = request.method == "OPTIONS"
        if isinstance(response, Response) and (described or response.content_type == MEDIA_TYPE):
            # A problem, or what an address takes, is JSON whatever form the answer would have had.
            request.accepted_renderer, request.accepted_media_type = JSONRenderer(), "application/json"
        response = super().finalize_response(request, response, *args, **kwargs)
        patch_vary_headers(response, ("Accept", "Authorization", "Cookie"))
        if "Cache-Control" not in response:
            response["Cache-Control"] = CHECKED
        if request.method == "GET" and response.status_code == 200 and isinstance(response, Response):
            response.add_post_render_callback(partial(_tagged, request))
        return response

    # Reading a request

    def params(self, request: Request, *known: str, paged: bool = False) -> dict[str, str]:
        """The query's parameters but those of pages; InvalidInput names the unknown ones.

        Of a parameter that stands more than once the last one counts.
        """
        given = {k: v for k, v in request.query_params.items() if not (paged and k in PARAMS)}
        cure = ", ".join((*known, *(PARAMS if paged else ()))) or "none"
        problems = [Problem("unknown parameter", field=k[:80], cure=cure) for k in given if k not in known]
        if problems:
            raise InvalidInput(problems)
        return given

    # Answering

    def listed(
        self,
        request: Request,
        queryset: Any,
        *,
        order: tuple[str, ...],
        shown: Callable[[Any], Iterable[dict[str, Any]]],
    ) -> Response:
        """A page of a list; ``shown`` brings the page's rows, all at once, to plain values."""
        page = requested_page(request, queryset, order=order)
        response = Response({"items": list(shown(page.items))})
        if links := link_header(request, page):
            response["Link"] = links
        return response

    def remembered(
        self, request: Request, answers: Remembered[tuple[bytes, str]], build: Callable[[], Response]
    ) -> HttpResponseBase:
        """What ``build`` answers with JSON, made anew only when something was written since.

        Only for what the record alone decides, and the person, the token's limits and the address.
        """
        media_type = request.accepted_media_type
        key = (request.user.pk, request.user.limits, request.build_absolute_uri(), media_type)

        def made() -> tuple[bytes, str]:
            response = build()
            data = request.accepted_renderer.render(response.data, media_type, self.get_renderer_context())
            return data, response.get("Link", "")

        data, links = answers.get(key, head=head_of_record(), make=made)
        response = self.conditional(
            request, lambda: HttpResponse(data, content_type="application/json"), etag=etag_of_bytes(data)
        )
        if links:
            response["Link"] = links
        return response

    def conditional(
        self,
        request: Request,
        build: Callable[[], HttpResponseBase | dict[str, Any]],
        *,
        etag_over: Iterable[object] = (),
        etag: str = "",
        immutable: bool = False,
    ) -> HttpResponseBase:
        """304 when the reader has it, before anything costly; else what ``build`` gives, with its ETag.

        ``etag_over`` is the record's hash and whatever state is shown; the form (JSON, CSV, ...) is added.
        ``etag`` is given ready for what is also changed with If-Match. ``immutable`` is for pure bytes and what
        follows from a hash alone.
        """
        etag = etag or etag_of(request.accepted_renderer.format, *etag_over)
        if is_known(request, etag):
            response: HttpResponseBase = HttpResponse(status=304)
        else:
            built = build()
            response = Response(built) if isinstance(built, dict) else built
        response["ETag"] = etag
        response["Cache-Control"] = IMMUTABLE if immutable else CHECKED
        return response

    def created(self, data: dict[str, Any], *, location: str, etag: str = "", status: int = 201) -> Response:
        """What a POST has made, and where it is."""
        response = Response(data, status=status)
        response["Location"] = location
        if etag:
            response["ETag"] = etag
        return response

    def accepted(self, data: dict[str, Any], *, location: str, retry_after: int = 1) -> Response:
        """202: work goes on in the background; where to look, and when."""
        response = self.created(data, location=location, status=202)
        response["Retry-After"] = str(retry_after)
        return response


def _require_clean_address(request: Request, places: Mapping[str, Any]) -> None:
    """Nothing that a database refuses, in the address or in its query."""
    if any(isinstance(place, str) and unstorable(place) is not None for place in places.values()):
        raise NotFound("nothing has such a name")
    problems = [
        Problem("a character that cannot be stored", field=ascii(name)[1:-1][:80], cure="text without it")
        for name, values in request.query_params.lists()
        if any(unstorable(text) is not None for text in (name, *values))
    ]
    if problems:
        raise InvalidInput(problems)


def _tagged(request: Request, response: Response) -> HttpResponseBase | None:
    """Give an answer without an ETag the one over its bytes; 304 when the reader has them."""
    if "ETag" in response:
        return None
    etag = etag_of_bytes(response.content)
    response["ETag"] = etag
    if not is_known(request, etag):
        return None
    kept = ("ETag", "Cache-Control", "Vary", "Link")
    return HttpResponse(status=304, headers={name: response[name] for name in kept if name in response})
