"""Logging in and out, and what one may change about one's own account."""

from __future__ import annotations

from typing import Any

from django.contrib import messages
from django.contrib.auth import update_session_auth_hash, views
from django.contrib.auth.forms import AuthenticationForm
from django.core.exceptions import ValidationError
from django.http import HttpResponse
from django.shortcuts import redirect
from django.urls import path

from kinetics_db.accounts.selectors import time_zones
from kinetics_db.errors import InvalidInput
from kinetics_db.projects.own_account import change_password, change_time_zone
from kinetics_db.web import throttle
from kinetics_db.web.account_forms import PasswordForm, TimeZoneForm
from kinetics_db.web.forms import form_response, problems_shown
from kinetics_db.web.pages import ReadersRequest, form_page

TOO_MANY = "too_many"
TOO_MANY_TRIES = (
    f"Too many failed tries for this name: {throttle.MOST_FAILURES} in "
    f"{throttle.WINDOW_SECONDS // 60} minutes. Wait that long, then try again."
)


class LoginForm(AuthenticationForm):
    """Name and password, with a limit on failed tries."""

    error_messages = {
        "invalid_login": "Name and password do not belong together. Capital and small letters count.",
        "inactive": "This account is switched off.",
        TOO_MANY: TOO_MANY_TRIES,
    }

    def __init__(self, request: Any = None, *args: Any, **kwargs: Any):
        super().__init__(request, *args, **kwargs)
        self.fields["username"].label = "Name"
        self.fields["password"].label = "Password"
        self.refused = False

    def clean(self) -> dict[str, Any]:
        account = self.cleaned_data.get("username")
        if not account or not self.cleaned_data.get("password"):
            return super().clean()
        address = self.request.META.get("REMOTE_ADDR", "") if self.request else ""
        if not throttle.begin_try(account=account, address=address):
            self.refused = True
            raise ValidationError(self.error_messages[TOO_MANY], code=TOO_MANY)
        cleaned = super().clean()  # raises when name and password do not belong together
        throttle.forget(account=account, address=address)
        return cleaned


class Login(views.LoginView):
    """Where everybody begins; whoever is logged in already is sent on."""

    template_name = "web/login.html"
    authentication_form = LoginForm
    redirect_authenticated_user = True

    def form_invalid(self, form: AuthenticationForm) -> HttpResponse:
        response = super().form_invalid(form)
        if getattr(form, "refused", False):
            response.status_code = 429
            response.headers["Retry-After"] = str(throttle.WINDOW_SECONDS)
        return response


class Logout(views.LogoutView):
    """Ends the session; by POST only, so that a link cannot do it."""


@form_page
def account(request: ReadersRequest) -> HttpResponse:
    """The clock that dates are shown by, and the password; ``change`` says which of the two forms was sent."""
    changing = request.POST.get("change", "") if request.method == "POST" else ""
    if request.method == "POST" and changing not in ("time zone", "password"):
        raise InvalidInput("the form does not say what is to be changed", cure="time zone, password")
    zone = TimeZoneForm(request.POST if changing == "time zone" else None, person=request.user)
    password = PasswordForm(request.POST if changing == "password" else None)
    if zone.is_bound and zone.is_valid():
        with problems_shown(zone):
            change_time_zone(user=request.user, time_zone=zone.cleaned_data["time_zone"])
            messages.success(request, f"Dates are now shown as in {request.user.time_zone}.")
            return redirect("web:account")
    if password.is_bound and password.is_valid():
        with problems_shown(password):
            _give_password(request, **password.cleaned_data)
            messages.success(request, "Your password is changed. Elsewhere you have been logged out.")
            return redirect("web:account")
    context = {"zone": zone, "password": password, "zones": sorted(time_zones())}
    return form_response(request, "web/account/account.html", context)


def _give_password(request: ReadersRequest, *, current: str, password: str, again: str) -> None:
    if password != again:
        raise InvalidInput("this is not the same as the new password", field="again")
    # Guesses at an open screen count like failed logins.
    account, address = request.user.get_username(), request.META.get("REMOTE_ADDR", "")
    if not throttle.begin_try(account=account, address=address):
        raise InvalidInput(TOO_MANY_TRIES, field="current")
    changed = change_password(user=request.user, current=current, password=password)
    throttle.forget(account=account, address=address)
    update_session_auth_hash(request, changed)


urlpatterns = [
    path("login/", Login.as_view(), name="login"),
    path("logout/", Logout.as_view(), name="logout"),
    path("account/", account, name="account"),
]
