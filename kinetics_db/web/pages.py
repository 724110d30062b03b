"""What all pages behind login share: who may come, whose clock is shown, how errors look."""

from __future__ import annotations

from collections.abc import Callable
from functools import wraps
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from django.contrib.auth.decorators import login_required
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.cache import never_cache
from django.views.decorators.http import require_safe

from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, RatewrightError, Unavailable
from kinetics_db.projects.selectors import roles_remembered

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

View = Callable[..., HttpResponse]


class ReadersRequest(HttpRequest):
    """A request of somebody who is logged in, as the views of pages get it; for type checkers."""

    user: User


ERRORS: dict[type[RatewrightError], tuple[int, str]] = {
    NotFound: (404, "There is no such page"),
    NotPermitted: (403, "You may not do this"),
    InvalidInput: (400, "The address cannot be used as it is"),
    Conflict: (409, "The record has changed meanwhile"),
    Unavailable: (503, "A part of the service does not answer"),
}


def page(view: View) -> View:
    """A page that is only read: behind login, never kept by browsers, in the reader's time zone.

    Errors of the services become pages in the same look.
    """

    @wraps(view)
    def shown(request: HttpRequest, *args: Any, **kwargs: Any) -> HttpResponse:
        try:
            with timezone.override(zone_of(request.user)), roles_remembered():
                return view(request, *args, **kwargs)
        except RatewrightError as error:
            return error_page(request, error)

    # A reader who has logged out must not be shown the page again from the browser's store.
    return never_cache(login_required(require_safe(shown)))


def error_page(request: HttpRequest, error: RatewrightError) -> HttpResponse:
    """The error as a page that says what is wrong."""
    status, heading = next(
        (found for kind, found in ERRORS.items() if isinstance(error, kind)), (500, "Something went wrong")
    )
    return render(request, "web/message.html", {"heading": heading, "message": str(error)}, status=status)


def zone_of(person: Any) -> ZoneInfo:
    """The person's time zone, UTC when its name is not known here."""
    try:
        return ZoneInfo(person.time_zone)
    except (ZoneInfoNotFoundError, ValueError, AttributeError):
        return ZoneInfo("UTC")
