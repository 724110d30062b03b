"""Access tokens, and people who act through them."""

from __future__ import annotations

from datetime import datetime, timedelta

from django.utils import timezone

from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.projects.access import issue_access_token


def in_days(days: float) -> datetime:
    return timezone.now() + timedelta(days=days)


def make_token(
    user: User, name: str = "notebook", *, scope: str = "read", project: str = ""
) -> tuple[AccessToken, str]:
    return issue_access_token(user=user, name=name, scope=scope, expires=in_days(30), project=project)


def through(token: AccessToken) -> User:
    """The token's person, as a request with it has them."""
    user = User.objects.get(pk=token.user_id)
    user.limits = token.limits
    return user
