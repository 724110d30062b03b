"""What all pages behind login share: who may come, whose clock is shown, how errors look."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import nullcontext
from functools import wraps
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from django.contrib.auth.decorators import login_required
from django.http import HttpRequest, HttpResponse, HttpResponseBase
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.cache import never_cache
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, RatewrightError, Unavailable
from kinetics_db.projects.selectors import roles_remembered
from kinetics_db.web.logged_out import logged_out

if TYPE_CHECKING:
    from django_htmx.middleware import HtmxDetails

    from kinetics_db.accounts.models import User

View = Callable[..., HttpResponseBase]


class ReadersRequest(HttpRequest):
    """A request of somebody who is logged in, as the views of pages get it; for type checkers."""

    user: User
    htmx: HtmxDetails


ERRORS: dict[type[RatewrightError], tuple[int, str]] = {
    NotFound: (404, "There is no such page"),
    NotPermitted: (403, "You may not do this"),
    InvalidInput: (400, "The address cannot be used as it is"),
    Conflict: (409, "The record has changed meanwhile"),
    Unavailable: (503, "A part of the service does not answer"),
}
NOT_ACCEPTED = (422, "What was sent cannot be used as it is")


def page(view: View) -> View:
    """A page that is only read: behind login, never kept by browsers, in the reader's time zone.

    Errors of the services become pages in the same look.
    """
    return never_cache(_behind_login(require_safe(_guarded(view))))


def form_page(view: View) -> View:
    """A page with a form: GET shows it, POST sends it. The view itself shows what is wrong with the input."""
    return never_cache(_behind_login(require_http_methods(["GET", "HEAD", "POST"])(_guarded(view))))


def download(view: View) -> View:
    """Bytes of the record behind login; the view itself says how long they may be kept."""
    return _behind_login(require_safe(_guarded(view)))


def action(view: View) -> View:
    """An address that does one thing and leads on: POST only, so that a link cannot do it."""
    return never_cache(_behind_login(require_POST(_guarded(view))))


def _guarded(view: View) -> View:
    @wraps(view)
    def shown(request: HttpRequest, *args: Any, **kwargs: Any) -> HttpResponseBase:
        reading = request.method in ("GET", "HEAD")
        try:
            # Roles are looked up anew while something is written: one may have been taken away meanwhile.
            with timezone.override(zone_of(request.user)), roles_remembered() if reading else nullcontext():
                return view(request, *args, **kwargs)
        except RatewrightError as error:
            return error_page(request, error)

    return shown


def _behind_login(view: View) -> View:
    """Send strangers to the login, or say that the session has ended where something would be lost (`logged_out`)."""
    guarded = login_required(view)

    @wraps(view)
    def entered(request: HttpRequest, *args: Any, **kwargs: Any) -> HttpResponseBase:
        told = None if request.user.is_authenticated else logged_out(request)
        return guarded(request, *args, **kwargs) if told is None else told

    return entered


def error_page(request: HttpRequest, error: RatewrightError) -> HttpResponse:
    """The error as a page that says what is wrong; as a paragraph where only a part of a page was asked for."""
    status, heading = next(
        (found for kind, found in ERRORS.items() if isinstance(error, kind)), (500, "Something went wrong")
    )
    if isinstance(error, InvalidInput) and request.method == "POST":
        status, heading = NOT_ACCEPTED
    template = "web/parts/wrong.html" if getattr(request, "htmx", False) else "web/message.html"
    return render(request, template, {"heading": heading, "message": str(error)}, status=status)


def zone_of(person: Any) -> ZoneInfo:
    """The person's time zone, UTC when its name is not known here."""
    try:
        return ZoneInfo(person.time_zone)
    except (ZoneInfoNotFoundError, ValueError, AttributeError):
        return ZoneInfo("UTC")
