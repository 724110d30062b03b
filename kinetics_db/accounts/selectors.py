"""Reads about people."""

from __future__ import annotations

import hashlib
from functools import lru_cache
from zoneinfo import available_timezones

from django.db.models import QuerySet

from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.errors import NotFound


def user_named(username: str) -> User:
    """The active person of that name; NotFound otherwise."""
    user = User.objects.filter(username=username, is_active=True).first()
    if user is None:
        raise NotFound(f"there is no active user '{username}'")
    return user


@lru_cache(maxsize=1)
def time_zones() -> frozenset[str]:
    """Names of the time zones that are known here."""
    return frozenset(available_timezones())


def has_users() -> bool:
    """Whether anybody has an account yet."""
    return User.objects.exists()


def digest_of_secret(secret: str) -> str:
    """SHA-256 of a token's secret: it has 256 random bits, so no slow hash is needed."""
    return hashlib.sha256(secret.encode(errors="replace")).hexdigest()


def token_of_secret(secret: str) -> AccessToken | None:
    """The token with its person, whether it is still good or not; None when there never was one."""
    return AccessToken.objects.select_related("user").filter(digest=digest_of_secret(secret)).first()


def access_tokens_of(*, user: User) -> QuerySet[AccessToken]:
    """A person's tokens, the newest first; through a token only that token."""
    tokens = AccessToken.objects.filter(user=user).order_by("-created", "-pk")
    if user.limits is not None:
        return tokens.filter(name=user.limits.token, withdrawn__isnull=True)
    return tokens
