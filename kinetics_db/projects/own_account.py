"""What people change about their own account: audited, and never through a token."""

from __future__ import annotations

from kinetics_db.accounts.limits import require_no_token
from kinetics_db.accounts.models import User
from kinetics_db.accounts.services import set_password, set_time_zone
from kinetics_db.errors import InvalidInput
from kinetics_db.provenance.services import recording

LONGEST_PASSWORD = 1000
"""More characters make nothing safer, and hashing them costs the server."""


def change_time_zone(*, user: User, time_zone: str) -> User:
    """Show dates to this person in another zone, by its IANA name ('Europe/Helsinki')."""
    require_no_token(user, what="changing an account")
    with recording(user=user):
        return set_time_zone(user=user, time_zone=time_zone)


def change_password(*, user: User, current: str, password: str) -> User:
    """Give oneself another password; the current one proves that it is not a stranger at an open screen."""
    require_no_token(user, what="changing a password")
    for field, typed in (("current", current), ("password", password)):
        if not isinstance(typed, str) or len(typed) > LONGEST_PASSWORD:
            raise InvalidInput(
                "this is too long for a password", field=field, cure=f"at most {LONGEST_PASSWORD} characters"
            )
    if not user.check_password(current):
        raise InvalidInput("this is not your current password", field="current")
    if current == password:
        raise InvalidInput("this is the password that you have already", field="password")
    with recording(user=user):
        return set_password(username=user.get_username(), password=password)
