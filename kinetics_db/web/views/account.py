"""Logging in and out."""

from __future__ import annotations

from typing import Any

from django.contrib.auth import views
from django.contrib.auth.forms import AuthenticationForm
from django.core.exceptions import ValidationError
from django.http import HttpResponse

from kinetics_db.web import throttle

TOO_MANY = "too_many"


class LoginForm(AuthenticationForm):
    """Name and password, with a limit on failed tries."""

    error_messages = {
        "invalid_login": "Name and password do not belong together. Capital and small letters count.",
        "inactive": "This account is switched off.",
        TOO_MANY: (
            f"Too many failed tries for this name: {throttle.MOST_FAILURES} in "
            f"{throttle.WINDOW_SECONDS // 60} minutes. Wait that long, then try again."
        ),
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
