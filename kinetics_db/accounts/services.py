"""Making accounts. The audit trail stands above and listens to what is saved."""

from __future__ import annotations

import secrets

from django.contrib.auth.password_validation import validate_password
from django.core.exceptions import ValidationError
from django.db import transaction

from kinetics_db.accounts.models import User
from kinetics_db.errors import InvalidInput


def create_user(*, username: str, password: str, is_staff: bool = False) -> User:
    """Make a person's account; InvalidInput says what is wrong with name or password."""
    user = User(username=username, is_staff=is_staff)
    try:
        user.clean_fields(exclude=["password"])
        validate_password(password, user)
    except ValidationError as error:
        raise InvalidInput("; ".join(error.messages), field="password") from error
    if User.objects.filter(username=username).exists():
        raise InvalidInput(f"there is an account '{username}' already", field="username", cure="another name")
    user.set_password(password)
    with transaction.atomic():  # together with its audit entry
        user.save()
    return user


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
    user.set_password(password)
    with transaction.atomic():
        user.save(update_fields=["password"])
    return user
