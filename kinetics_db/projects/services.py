"""Making projects and giving roles."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import fields

from django.db import IntegrityError, transaction

from kinetics_db.accounts.models import User
from kinetics_db.accounts.selectors import user_named
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.engine.run_evidence import Thresholds
from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, Problem
from kinetics_db.projects.models import Membership, Project
from kinetics_db.projects.selectors import RESERVED_SLUGS, require_owner
from kinetics_db.provenance.services import note_write, recording

SLUG = re.compile(r"[a-z0-9]+(?:-[a-z0-9]+)*\Z")


def create_project(
    *, user: User, slug: str, name: str, description: str = "", invented: bool = False
) -> Project:
    """Make a project; its maker becomes its first owner."""
    limits = user.limits
    if limits is not None and (limits.project_id is not None or not limits.may_write):
        raise NotPermitted(f"the token '{limits.token}' cannot make projects")
    if not isinstance(slug, str) or not SLUG.match(slug) or len(slug) > 60:
        raise InvalidInput(
            f"{slug!r:.80} cannot be a project's short name",
            field="slug",
            cure="small letters, digits and single hyphens",
        )
    if slug in RESERVED_SLUGS:
        raise InvalidInput(f"'{slug}' stands for a page of its own", field="slug", cure="another short name")
    name = plain_text(name, field="name", what="a project", longest=200, required=True)
    description = plain_text(description, field="description", longest=20_000, lines=True)
    with recording(user=user):
        try:
            with transaction.atomic():
                project = Project.objects.create(
                    slug=slug, name=name, description=description, invented=invented, created_by=user
                )
        except IntegrityError as error:
            raise Conflict(f"there is a project '{slug}' already") from error
        Membership.objects.create(project=project, user=user, role=Membership.Role.OWNER)
        note_write(
            verb="made", record_kind="project", record_id=project.pk, project_id=project.pk, label=slug
        )
    return project


def lock_project(project_id: int) -> None:
    """Put writers of one project in line until the transaction ends; to be called before any other write.

    Whatever is numbered or named once a project is written under this lock. It does not hinder rows that
    merely point at the project.
    """
    Project.objects.select_for_update(no_key=True).only("pk").get(pk=project_id)


def set_verdict_thresholds(*, user: User, project: Project, thresholds: Mapping[str, float]) -> Project:
    """Set where the project's verdicts change, over the defaults; later fits are judged by them.

    ``thresholds`` holds only what differs, by the names of `engine.run_evidence.Thresholds`.
    """
    require_owner(user=user, project_id=project.pk)
    known = [f.name for f in fields(Thresholds)]
    problems = [
        Problem(f"unknown threshold '{name}'", field=f"thresholds.{name}", cure=", ".join(known))
        for name in thresholds
        if name not in known
    ]
    problems += [
        Problem(f"{name} is {value!r}", field=f"thresholds.{name}", cure="a number above 0")
        for name, value in thresholds.items()
        if isinstance(value, bool) or not isinstance(value, int | float) or not 0.0 < value < math.inf
    ]
    if problems:
        raise InvalidInput(problems)
    with recording(user=user):
        project.verdict_thresholds = dict(thresholds)
        project.save(update_fields=["verdict_thresholds"])
        note_write(
            verb="set verdict thresholds",
            record_kind="project",
            record_id=project.pk,
            project_id=project.pk,
            label=project.slug,
            reason=", ".join(f"{name} {value:g}" for name, value in sorted(thresholds.items())),
        )
    return project


def set_member(*, user: User, project: Project, member: User, role: str) -> Membership:
    """Give a person a role; a project always keeps an owner."""
    if role not in Membership.Role.values:
        raise InvalidInput(f"'{role}' is not a role", field="role", cure=", ".join(Membership.Role.values))
    with recording(user=user):
        lock_project(project.pk)
        require_owner(user=user, project_id=project.pk)
        others = Membership.objects.filter(project=project, role=Membership.Role.OWNER)
        if role != Membership.Role.OWNER and not others.exclude(user=member).exists():
            raise Conflict("a project keeps at least one owner; make somebody else an owner first")
        membership, _ = Membership.objects.update_or_create(
            project=project, user=member, defaults={"role": role}
        )
        note_write(
            verb=f"gave role {role}",
            record_kind="membership",
            record_id=membership.pk,
            project_id=project.pk,
            label=member.get_username(),
        )
    return membership


def give_role(*, user: User, project: Project, username: str, role: str) -> Membership:
    """Give the person of that name a role. Only owners learn which names there are."""
    require_owner(user=user, project_id=project.pk)
    username = plain_text(username, field="username", what="a role", longest=150, required=True)
    try:
        member = user_named(username)
    except NotFound as error:
        raise InvalidInput(
            str(error), field="username", cure="the name that the person logs in with"
        ) from error
    return set_member(user=user, project=project, member=member, role=role)


def remove_member(*, user: User, project: Project, username: str) -> None:
    """Take a person's role away; what he or she entered stays. A project always keeps an owner."""
    with recording(user=user):
        lock_project(project.pk)
        require_owner(user=user, project_id=project.pk)
        username = plain_text(username, field="username", longest=150)
        members = Membership.objects.filter(project=project)
        membership = members.filter(user__username=username).first()
        if membership is None:
            raise InvalidInput(f"'{username}' has no role in this project", field="username")
        if not members.filter(role=Membership.Role.OWNER).exclude(pk=membership.pk).exists():
            raise Conflict("a project keeps at least one owner; make somebody else an owner first")
        removed, role = membership.pk, membership.role
        membership.delete()
        note_write(
            verb=f"took role {role}",
            record_kind="membership",
            record_id=removed,
            project_id=project.pk,
            label=username,
        )
