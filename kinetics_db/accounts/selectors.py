"""Reads about people."""

from __future__ import annotations

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound


def user_named(username: str) -> User:
    """The active person of that name; NotFound otherwise."""
    user = User.objects.filter(username=username, is_active=True).first()
    if user is None:
        raise NotFound(f"there is no active user '{username}'")
    return user


def has_users() -> bool:
    """Whether anybody has an account yet."""
    return User.objects.exists()
