"""Forms of one's own account and its access tokens."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, datetime, time, timedelta
from typing import TYPE_CHECKING, Any

from django import forms
from django.utils import timezone

from kinetics_db.errors import InvalidInput
from kinetics_db.web.forms import PlainForm

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

DAYS_PROPOSED = 90
SCOPES = (("read", "read only"), ("write", "read and write, as far as your roles go"))


class TimeZoneForm(PlainForm):
    """The zone that dates are shown in."""

    time_zone = forms.CharField(
        label="Time zone",
        required=False,
        widget=forms.TextInput(attrs={"list": "zones", "autocomplete": "off", "spellcheck": "false"}),
        help_text="Begin to write the name of a place, such as Helsinki. What is stored is the same for everybody.",
    )

    def __init__(self, *args: Any, person: User, **kwargs: Any):
        super().__init__(*args, initial={"time_zone": person.time_zone}, **kwargs)


def _secret(label: str, autocomplete: str, help_text: str = "") -> forms.CharField:
    # Blanks at the ends belong to a password.
    return forms.CharField(
        label=label,
        required=False,
        strip=False,
        widget=forms.PasswordInput(attrs={"autocomplete": autocomplete}),
        help_text=help_text,
    )


class PasswordForm(PlainForm):
    """Another password, typed twice since nobody sees it."""

    current = _secret("Current password", "current-password")
    password = _secret("New password", "new-password", "10 characters or more, not a common one.")
    again = _secret("New password, once more", "new-password")


class TokenForm(PlainForm):
    """What an access token may do, where, and until when."""

    name = forms.CharField(
        label="What it is for", required=False, help_text="Such as: script on the HPLC computer."
    )
    scope = forms.CharField(label="It may", required=False, widget=forms.Select(choices=SCOPES))
    project = forms.CharField(label="In which project", required=False, widget=forms.Select)
    expires = forms.CharField(
        label="Last day",
        required=False,
        widget=forms.TextInput(attrs={"autocomplete": "off", "class": "short"}),
        help_text="As year, month, day; at most a year from now. At the end of that day it stops working.",
    )

    def __init__(self, *args: Any, slugs: Sequence[str], **kwargs: Any):
        proposed = timezone.localdate() + timedelta(days=DAYS_PROPOSED)
        super().__init__(*args, initial={"expires": proposed.isoformat()}, **kwargs)
        places = [("", "all projects that you may see"), *((slug, f"{slug} only") for slug in slugs)]
        self.fields["project"].widget.choices = places


def end_of_day(text: str) -> datetime:
    """The last second of the day that was typed, in the person's zone."""
    try:
        day = date.fromisoformat(text.strip())
    except ValueError as error:
        raise InvalidInput(
            f"'{text:.40}' is no date" if text.strip() else "a token needs a last day",
            field="expires",
            cure=f"year, month, day, such as {timezone.localdate() + timedelta(days=DAYS_PROPOSED)}",
        ) from error
    return datetime.combine(day, time(23, 59, 59), tzinfo=timezone.get_current_timezone())
