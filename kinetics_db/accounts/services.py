"""Making accounts. The audit trail stands above and listens to what is saved."""

from __future__ import annotations

import secrets
from datetime import datetime, timedelta

from django.contrib.auth.password_validation import validate_password
from django.core.exceptions import ValidationError
from django.db import IntegrityError, transaction
from django.db.models import Q
from django.utils import timezone

from kinetics_db.accounts.limits import SCOPES, require_no_token
from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.accounts.selectors import digest_of_secret, time_zones
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import Conflict, InvalidInput, NotFound


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


def set_time_zone(*, user: User, time_zone: str) -> User:
    """Show dates to this person in another zone, by its IANA name."""
    time_zone = plain_text(time_zone, field="time_zone", longest=64, required=True)
    if time_zone not in time_zones():
        raise InvalidInput(
            f"there is no time zone '{time_zone}'",
            field="time_zone",
            cure="the name of a place as in 'Europe/Helsinki', or 'UTC'",
        )
    user.time_zone = time_zone
    with transaction.atomic():
        user.save(update_fields=["time_zone"])
    return user


PREFIX = "rw_"
LONGEST_LIFE = timedelta(days=366)
USE_NOTED_EVERY = timedelta(minutes=1)


def make_access_token(
    *, user: User, name: str, scope: str, expires: datetime, project_id: int | None = None
) -> tuple[AccessToken, str]:
    """Make a token; gives it with its secret, which is nowhere kept. `projects.access` checks and audits."""
    require_no_token(user, what="making a token")
    name = plain_text(name, field="name", what="a token", longest=60, required=True)
    if scope not in SCOPES:
        raise InvalidInput(f"{scope!r:.40} is not a scope", field="scope", cure=", ".join(SCOPES))
    now = timezone.now()
    if not now < expires <= now + LONGEST_LIFE:
        raise InvalidInput(
            f"a token cannot expire at {expires:%Y-%m-%d %H:%M}",
            field="expires",
            cure=f"a time to come, at most {LONGEST_LIFE.days} days from now",
        )
    secret = PREFIX + secrets.token_urlsafe(32)
    token = AccessToken(
        user=user, name=name, digest=digest_of_secret(secret), start=secret[:9], scope=scope,
        project_id=project_id, created=now, expires=expires,
    )  # fmt: skip
    try:
        with transaction.atomic():
            token.save()
    except IntegrityError as error:
        raise InvalidInput(
            f"you have a token '{name}' already",
            field="name",
            cure="another name, or withdraw that one first",
        ) from error
    return token, secret


def end_access_token(*, user: User, token_id: int) -> AccessToken:
    """Withdraw a token of one's own. `projects.access` audits."""
    require_no_token(user, what="withdrawing a token")
    token = AccessToken.objects.filter(pk=token_id, user=user).first()
    if token is None:
        raise NotFound("you have no such token")
    now = timezone.now()
    if not AccessToken.objects.filter(pk=token.pk, withdrawn__isnull=True).update(withdrawn=now):
        raise Conflict(f"the token '{token.name}' is withdrawn already")
    token.withdrawn = now
    return token


def note_use(token: AccessToken) -> None:
    """Remember when a token was last used, to the minute, so that reading does not mean writing each time."""
    now = timezone.now()
    if token.last_used is None or token.last_used < now - USE_NOTED_EVERY:
        stale = Q(last_used__isnull=True) | Q(last_used__lt=now - USE_NOTED_EVERY)
        AccessToken.objects.filter(stale, pk=token.pk).update(last_used=now)
