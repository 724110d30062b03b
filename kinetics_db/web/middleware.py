"""Response headers of every page, beside the content policy that django-csp sends (settings)."""

from __future__ import annotations

from collections.abc import Callable

from django.http import HttpRequest, HttpResponseBase

UNUSED_FEATURES = (
    "accelerometer", "camera", "display-capture", "geolocation", "gyroscope", "magnetometer", "microphone",
    "midi", "payment", "usb",
)  # fmt: skip
HEADERS = {
    "Permissions-Policy": ", ".join(f"{feature}=()" for feature in UNUSED_FEATURES),
    # Forms over https need the referrer of our own pages; nobody else is told where a reader comes from.
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
}


class PageHeaders:
    """Sets each header that the response does not carry already: a REST response keeps its own policy."""

    def __init__(self, get_response: Callable[[HttpRequest], HttpResponseBase]):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponseBase:
        response = self.get_response(request)
        for name, value in HEADERS.items():
            response.headers.setdefault(name, value)
        return response
