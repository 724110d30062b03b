"""Making accounts. The audit trail stands above and listens to what is saved."""

from __future__ import annotations

import secrets

from django.contrib.auth.password_validation import validate_password
from django.core.exceptions import ValidationError
from django.db import IntegrityError, transaction

from kinetics_db.accounts.models import User
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput


def create_user(*, username: str, password: str, is_staff: bool = False) -> User:
    """Make a person's account; InvalidInput says what is wrong with name or password."""
    # NFKC, as the login form reads it: a name that nobody could type would lock its owner out.
    username = plain_text(User.normalize_username(username), field="username", longest=150, required=True)
    user = User(username=username, is_staff=is_staff)
    try:
        user.clean_fields(exclude=["password"])
    except ValidationError as error:
        raise InvalidInput("; ".join(error.messages), field="username") from error
    _set_password(user, password)
    try:
        with transaction.atomic():  # together with its audit entry
            user.save()
    except IntegrityError as error:
        raise InvalidInput(
            f"there is an account '{username}' already", field="username", cure="another name"
        ) from error
    return user


def _set_password(user: User, password: str) -> None:
    try:
        validate_password(password, user)
    except ValidationError as error:
        raise InvalidInput("; ".join(error.messages), field="password") from error
    user.set_password(password)


def ensure_user(*, username: str) -> tuple[User, str | None]:
    """The account of that name, made with a fresh random password (returned once) when there is none."""
    user = User.objects.filter(username=username).first()
    if user is not None:
        return user, None
    password = secrets.token_urlsafe(12)
    return create_user(username=username, password=password, is_staff=True), password


def set_password(*, username: str, password: str) -> User:
    """Give an account another password."""
    user = User.objects.filter(username=username).first()
    if user is None:
        raise InvalidInput(f"there is no account '{username}'", field="username")
    _set_password(user, password)
    with transaction.atomic():
        user.save(update_fields=["password"])
    return user
