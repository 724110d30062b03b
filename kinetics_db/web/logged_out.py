"""What a page says to somebody whose session has ended meanwhile, so that what was typed is not lost."""

from __future__ import annotations

from typing import Any
from urllib.parse import urlencode

from django.conf import settings
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render, resolve_url
from django_htmx.http import HttpResponseClientRedirect

STATUS = 403
NOT_SENT_AGAIN = frozenset({"csrfmiddlewaretoken", "current", "password", "again"})
"""The token is a new one then, and passwords do not stand in pages."""


def logged_out(request: HttpRequest) -> HttpResponse | None:
    """The answer to who is not logged in; None where the login itself will do, since nothing was typed.

    A form comes back with all that was sent, to be sent again after a login in another tab. A part of a page
    that htmx asks for says so in place where the person is typing, and leads to the login where not.
    """
    part: Any = getattr(request, "htmx", False)
    if request.method != "POST":
        page = (part and part.current_url_abs_path) or request.get_full_path()
        return HttpResponseClientRedirect(_login(next=page)) if part else None
    kept = [
        (name, value)
        for name, values in request.POST.lists()
        if name not in NOT_SENT_AGAIN
        for value in values
    ]
    if part:
        return render(request, "web/parts/logged_out.html", {"login": _login()}, status=STATUS)
    if not kept:
        return None
    context = {
        "login": _login(),
        "address": request.get_full_path(),
        "kept": kept,
        "files": bool(request.FILES),
    }
    return render(request, "web/logged_out.html", context, status=STATUS)


def _login(**query: str) -> str:
    address = resolve_url(settings.LOGIN_URL)
    return f"{address}?{urlencode(query, safe='/')}" if query else address
