"""Every error as RFC 9457 problem details."""

from __future__ import annotations

import json
import logging
from collections.abc import Sequence
from http import HTTPStatus
from typing import Any

from django.conf import settings
from django.core.exceptions import RequestDataTooBig, SuspiciousOperation
from django.core.signals import got_request_exception
from django.db import InterfaceError, OperationalError
from django.http import HttpRequest, HttpResponse, UnreadablePostError
from django.views.defaults import bad_request as page_of_bad_request
from rest_framework.response import Response
from rest_framework.views import exception_handler

from kinetics_db.errors import (
    Conflict,
    InvalidInput,
    NotFound,
    NotPermitted,
    Problem,
    RatewrightError,
    Unavailable,
)

logger = logging.getLogger("api")

BASE = "/api/v1/"
MEDIA_TYPE = "application/problem+json"
RETRY_SECONDS = 5
MOST_PROBLEMS = 100
"""A text of nothing but mistakes is answered with the first of them."""

STATUS: dict[type[RatewrightError], tuple[int, str]] = {
    InvalidInput: (422, "The request cannot be used as it is"),
    NotPermitted: (403, "Not permitted"),
    NotFound: (404, "Not found"),
    Conflict: (409, "In conflict with the record as it is now"),
    Unavailable: (503, "A service that this needs does not answer"),
}
TITLES = dict(STATUS.values())


def problem_details(error: Exception, context: dict[str, Any]) -> Response:
    """Any error as application/problem+json; what nobody foresaw is logged and tells nothing."""
    for kind, (status, title) in STATUS.items():
        if isinstance(error, kind):
            if isinstance(error, InvalidInput):
                return _problem(status, _first(error.problems), title=title, problems=error.problems)
            return _problem(status, str(error), title=title)
    if isinstance(error, RequestDataTooBig):
        most = settings.DATA_UPLOAD_MAX_MEMORY_SIZE
        return _problem(413, f"the body has more than {most:,} bytes; that is the most without a file")
    if isinstance(error, SuspiciousOperation | UnreadablePostError):
        return _problem(400, "the request cannot be read")
    if isinstance(error, OperationalError | InterfaceError):
        logger.error("the database does not answer: %s", error)
        return _problem(503, "the database does not answer now")
    response = exception_handler(error, context)
    if response is None:
        return _unforeseen(error, context)
    detail = response.data.get("detail", "") if isinstance(response.data, dict) else response.data
    answer = _problem(response.status_code, detail, problems=getattr(error, "problems", None))
    for name in ("WWW-Authenticate", "Retry-After"):
        if name in response:
            answer[name] = response[name]
    return answer


def bad_request(request: HttpRequest, exception: Exception) -> HttpResponse:
    """400 for what is refused before any view: problem details below /api/v1/, a page elsewhere."""
    if not request.path.startswith(BASE):
        return page_of_bad_request(request, exception)
    detail = "the address, host name or form of the request is not what this server accepts"
    answer = _problem(400, detail)
    headers = {"Cache-Control": answer["Cache-Control"]}
    return HttpResponse(json.dumps(answer.data), status=400, content_type=MEDIA_TYPE, headers=headers)


def plain_problem(problem: Problem) -> dict[str, Any]:
    """A problem with what is known of its place and cure."""
    known = {name: getattr(problem, name) for name in ("message", "field", "line", "column", "cure")}
    plain = {name: value for name, value in known.items() if value not in (None, "")}
    return plain if problem.severity == "error" else {**plain, "severity": problem.severity}


def _first(problems: Sequence[Problem]) -> str:
    more = len(problems) - MOST_PROBLEMS
    words = "; ".join(str(problem) for problem in problems[:MOST_PROBLEMS])
    return f"{words}; and {more} more" if more > 0 else words


def _problem(
    status: int, detail: object, *, title: str = "", problems: Sequence[Problem] | None = None
) -> Response:
    title = title or TITLES.get(status) or HTTPStatus(status).phrase
    body: dict[str, Any] = {"title": title, "status": status, "detail": detail or title}
    if problems is not None:
        body["problems"] = [plain_problem(p) for p in problems[:MOST_PROBLEMS]]
    response = Response(body, status=status, content_type=MEDIA_TYPE)
    response["Cache-Control"] = "no-store"
    if status == 503:
        response["Retry-After"] = str(RETRY_SECONDS)
    return response


def _unforeseen(error: Exception, context: dict[str, Any]) -> Response:
    request = context.get("request")
    where = f"{request.method} {request.path}" if request is not None else "a request"
    logger.error("%s failed", where, exc_info=error)
    got_request_exception.send(sender=context.get("view"), request=getattr(request, "_request", None))
    return _problem(500, "this is a fault of the server; it has been logged")
