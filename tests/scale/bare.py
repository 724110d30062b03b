"""Addresses of the service, and two more that do nothing but answer bytes that are ready."""

from __future__ import annotations

from django.contrib.auth.decorators import login_required
from django.http import HttpRequest, HttpResponse
from django.urls import include, path
from rest_framework.request import Request

from api.base import ApiView

READY: dict[str, bytes] = {}
"""What is answered, by the last part of the address."""


@login_required
def page(request: HttpRequest) -> HttpResponse:
    """A page behind login."""
    return HttpResponse(READY["page"])


class Endpoint(ApiView):
    """An endpoint behind a token."""

    def get(self, request: Request) -> HttpResponse:
        """The bytes as JSON."""
        return HttpResponse(READY["endpoint"], content_type="application/json")


urlpatterns = [
    path("bare/page/", page),
    path("bare/endpoint/", Endpoint.as_view()),
    path("", include("kinetics_db.config.urls")),
]
