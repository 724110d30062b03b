"""Which projects a person sees, and what they may do there; the one rule for browser, REST and workers."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar

from django.db.models import QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound, NotPermitted
from kinetics_db.projects.models import Membership, Project

NOT_VISIBLE = "there is no such record that you may see"
"""One sentence for what is not there and what is somebody else's, so that nobody learns which."""

RANK = {Membership.Role.READER: 1, Membership.Role.CONTRIBUTOR: 2, Membership.Role.OWNER: 3}


def projects_visible_to(user: User) -> QuerySet[Project]:
    """Projects that the person is a member of."""
    return Project.objects.filter(memberships__user=user).order_by("slug")


def project_named(*, user: User, slug: str) -> Project:
    """A project that the person may see; NotFound otherwise, so that names leak nothing."""
    project = projects_visible_to(user).select_related("created_by").filter(slug=slug).first()
    if project is None:
        raise NotFound(f"there is no project '{slug}' that you may see")
    return project


_remembered: ContextVar[dict[tuple[int | None, int], str | None] | None] = ContextVar("roles", default=None)


@contextmanager
def roles_remembered() -> Iterator[None]:
    """Look each role up once inside this block; for a page, which reads many things at one moment.

    Never around writes: a role that is taken away meanwhile would still count until the block ends.
    """
    token = _remembered.set({})
    try:
        yield
    finally:
        _remembered.reset(token)


def role_in(*, user: User, project_id: int) -> str | None:
    """The person's role, or None when not a member (or not signed in)."""
    if not user.is_authenticated:
        return None
    known, key = _remembered.get(), (user.pk, project_id)
    if known is not None and key in known:
        return known[key]
    role = Membership.objects.filter(user=user, project_id=project_id).values_list("role", flat=True).first()
    if known is not None:
        known[key] = role
    return role


def require_reader(*, user: User, project_id: int) -> None:
    """NotFound unless the person is a member."""
    if role_in(user=user, project_id=project_id) is None:
        raise NotFound(NOT_VISIBLE)


def require_contributor(*, user: User, project_id: int) -> None:
    """NotFound for strangers, NotPermitted for readers."""
    _require(user, project_id, Membership.Role.CONTRIBUTOR)


def require_owner(*, user: User, project_id: int) -> None:
    """NotFound for strangers, NotPermitted for all but owners."""
    _require(user, project_id, Membership.Role.OWNER)


def _require(user: User, project_id: int, needed: Membership.Role) -> None:
    role = role_in(user=user, project_id=project_id)
    if role is None:
        raise NotFound(NOT_VISIBLE)
    if RANK[Membership.Role(role)] < RANK[needed]:
        raise NotPermitted(f"this needs the role '{needed}' in the project; yours is '{role}'")
