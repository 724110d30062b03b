"""Every error as RFC 9457 problem details."""

from __future__ import annotations

from http import HTTPStatus
from typing import Any

from rest_framework.response import Response
from rest_framework.views import exception_handler

from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, RatewrightError, Unavailable

STATUS: dict[type[RatewrightError], tuple[int, str]] = {
    InvalidInput: (422, "The request cannot be used as it is"),
    NotPermitted: (403, "Not permitted"),
    NotFound: (404, "Not found"),
    Conflict: (409, "In conflict with the record as it is now"),
    Unavailable: (503, "A service that this needs does not answer"),
}
TITLES = dict(STATUS.values())


def problem_details(error: Exception, context: dict[str, Any]) -> Response | None:
    """Our errors and the framework's, as application/problem+json; None (a 500) for what nobody foresaw."""
    for kind, (status, title) in STATUS.items():
        if isinstance(error, kind):
            body: dict[str, Any] = {"title": title, "status": status, "detail": str(error)}
            if isinstance(error, InvalidInput):
                body["problems"] = [
                    {
                        key: value
                        for key, value in (
                            ("message", p.message),
                            ("field", p.field),
                            ("line", p.line),
                            ("column", p.column),
                            ("cure", p.cure),
                        )
                        if value not in (None, "")
                    }
                    for p in error.problems
                ]
            return Response(body, status=status, content_type="application/problem+json")
    response = exception_handler(error, context)
    if response is not None:
        title = TITLES.get(response.status_code) or HTTPStatus(response.status_code).phrase
        detail = response.data.get("detail", title) if isinstance(response.data, dict) else response.data
        response.data = {"title": title, "status": response.status_code, "detail": detail}
        response.content_type = "application/problem+json"
    return response
