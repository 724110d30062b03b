"""Access tokens as people ask for them: checked against their projects, and audited."""

from __future__ import annotations

from datetime import datetime

from kinetics_db.accounts.limits import require_no_token
from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.accounts.services import end_access_token, make_access_token
from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.projects.selectors import project_named
from kinetics_db.provenance.services import note_write, recording


def issue_access_token(
    *, user: User, name: str, scope: str, expires: datetime, project: str = ""
) -> tuple[AccessToken, str]:
    """Make a token for oneself; gives it with its secret, to be shown once.

    ``scope`` is 'read' or 'write'; ``project`` the short name of the only project that it opens, empty for all
    that the person may see; ``expires`` a time with its zone, at most 366 days from now.
    """
    require_no_token(user, what="making a token")
    try:
        project_id = project_named(user=user, slug=project).pk if project else None
    except NotFound as error:
        raise InvalidInput(str(error), field="project", cure="a project of yours, or none") from error
    with recording(user=user):
        token, secret = make_access_token(
            user=user, name=name, scope=scope, expires=expires, project_id=project_id
        )
        note_write(
            verb="issued",
            record_kind="access token",
            record_id=token.pk,
            project_id=project_id,
            label=token.name,
            reason=f"may {scope} until {expires:%Y-%m-%d}",
        )
    return token, secret


def withdraw_access_token(*, user: User, token_id: int) -> AccessToken:
    """Withdraw a token of one's own, at once and for good."""
    with recording(user=user):
        token = end_access_token(user=user, token_id=token_id)
        note_write(
            verb="withdrew",
            record_kind="access token",
            record_id=token.pk,
            project_id=token.project_id,
            label=token.name,
        )
    return token
