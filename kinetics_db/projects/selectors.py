"""Which projects a person sees, and what they may do there; the one rule for browser, REST and workers."""

from __future__ import annotations

import itertools
import re
from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from typing import Any

from django.db.models import F, QuerySet, Value
from django.utils.text import slugify

from kinetics_db.accounts.limits import Limits
from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound, NotPermitted
from kinetics_db.projects.models import Membership, Project

NOT_VISIBLE = "there is no such record that you may see"
"""One sentence for what is not there and what is somebody else's, so that nobody learns which."""

LONGEST_SLUG = 60
RESERVED_SLUGS = frozenset({"new"})
"""Not for projects: they stand in addresses at the same place."""

RANK = {Membership.Role.READER: 1, Membership.Role.CONTRIBUTOR: 2, Membership.Role.OWNER: 3}


def projects_visible_to(user: User) -> QuerySet[Project]:
    """Projects that the person is a member of and that the token opens, where one is used."""
    visible = Project.objects.filter(memberships__user=user).order_by("slug")
    limits = getattr(user, "limits", None)
    return visible if limits is None or limits.project_id is None else visible.filter(pk=limits.project_id)


def project_named(*, user: User, slug: str) -> Project:
    """A project that the person may see; NotFound otherwise, so that names leak nothing."""
    return _called(projects_visible_to(user).select_related("created_by"), slug)


def projects_with_roles(*, user: User) -> QuerySet[Project]:
    """The projects that the person may see, each with its maker and the person's ``role``, in one query."""
    visible = projects_visible_to(user).select_related("created_by")
    if user.limits is not None and not user.limits.may_write:
        return visible.annotate(role=Value(str(Membership.Role.READER)))
    return visible.annotate(role=F("memberships__role"))


def project_with_role(*, user: User, slug: str) -> tuple[Project, str]:
    """A project with its maker, and the person's role in it, in one query; NotFound as for `project_named`.

    Inside `roles_remembered` the role is not looked up again.
    """
    project = _called(projects_with_roles(user=user), slug)
    known = _remembered.get()
    if known is not None:
        known[user.pk, user.limits, project.pk] = project.role
    return project, project.role


def _called(visible: QuerySet[Project], slug: str) -> Any:
    """The one of that short name; a text with a NUL is none, and databases refuse to look for it."""
    project = None if "\0" in slug else visible.filter(slug=slug).order_by().first()
    if project is None:
        raise NotFound(f"there is no project '{slug[:LONGEST_SLUG]}' that you may see")
    return project


def members_of(*, user: User, project: Project) -> QuerySet[Membership]:
    """Who belongs to a project, with the people, by name."""
    require_reader(user=user, project_id=project.pk)
    return Membership.objects.filter(project=project).select_related("user").order_by("user__username", "id")


_remembered: ContextVar[dict[tuple[int | None, Limits | None, int], str | None] | None] = ContextVar(
    "roles", default=None
)


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
    """The person's role, or None when not a member (or not signed in).

    A token opens one project only where it says so, and makes a reader of everybody where it may only read.
    """
    if not user.is_authenticated:
        return None
    known, key = _remembered.get(), (user.pk, user.limits, project_id)
    if known is not None and key in known:
        return known[key]
    role = Membership.objects.filter(user=user, project_id=project_id).values_list("role", flat=True).first()
    role = _within(user.limits, project_id=project_id, role=role)
    if known is not None:
        known[key] = role
    return role


def _within(limits: Limits | None, *, project_id: int, role: str | None) -> str | None:
    if limits is None or role is None:
        return role
    if not limits.covers(project_id):
        return None
    return role if limits.may_write else str(Membership.Role.READER)


def require_reader(*, user: User, project_id: int) -> None:
    """NotFound unless the person is a member."""
    if role_in(user=user, project_id=project_id) is None:
        raise NotFound(NOT_VISIBLE)


def require_contributor(*, user: User, project_id: int) -> None:
    """NotFound for strangers, NotPermitted for readers."""
    _require(user, project_id, Membership.Role.CONTRIBUTOR)


def may_contribute(*, user: User, project_id: int) -> bool:
    """Whether the person may write in the project, so that a page shows no button that would be refused."""
    role = role_in(user=user, project_id=project_id)
    return role is not None and RANK[Membership.Role(role)] >= RANK[Membership.Role.CONTRIBUTOR]


def require_owner(*, user: User, project_id: int) -> None:
    """NotFound for strangers, NotPermitted for all but owners."""
    _require(user, project_id, Membership.Role.OWNER)


def _require(user: User, project_id: int, needed: Membership.Role) -> None:
    role = role_in(user=user, project_id=project_id)
    if role is None:
        raise NotFound(NOT_VISIBLE)
    if RANK[Membership.Role(role)] < RANK[needed]:
        if user.limits is not None and not user.limits.may_write:
            raise NotPermitted(f"the token '{user.limits.token}' may only read")
        raise NotPermitted(f"this needs the role '{needed}' in the project; yours is '{role}'")


def free_slug(*, name: str) -> str:
    """A short name for a project of that name that no project has yet: 'Oxidation, again' -> 'oxidation-again-2'."""
    base = slugify(name).replace("_", "-").strip("-")
    base = re.sub("-{2,}", "-", base)[: LONGEST_SLUG - 4].strip("-") or "project"
    taken = RESERVED_SLUGS | set(Project.objects.filter(slug__startswith=base).values_list("slug", flat=True))
    numbered = (f"{base}-{number}" for number in itertools.count(2))
    return base if base not in taken else next(slug for slug in numbered if slug not in taken)
