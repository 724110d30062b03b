"""Reads about mechanisms."""

from __future__ import annotations

from functools import lru_cache

from django.db.models import Count, OuterRef, QuerySet, Subquery

from kinetics_db.accounts.models import User
from kinetics_db.engine.network import Network, parse_mechanism
from kinetics_db.errors import NotFound
from kinetics_db.mechanisms.models import Mechanism, MechanismVersion
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader


def mechanisms_in(*, user: User, project_id: int) -> QuerySet[Mechanism]:
    """Mechanisms of a project by name, each with its ``number_of_versions`` and its newest version's
    ``newest_id``, ``newest_number``, ``newest_note``, ``newest_author`` and ``newest_created``; one query."""
    require_reader(user=user, project_id=project_id)
    newest = MechanismVersion.objects.filter(mechanism=OuterRef("pk")).order_by("-number")
    return (
        Mechanism.objects.filter(project_id=project_id)
        .annotate(
            number_of_versions=Count("versions"),
            newest_id=Subquery(newest.values("pk")[:1]),
            newest_number=Subquery(newest.values("number")[:1]),
            newest_note=Subquery(newest.values("note")[:1]),
            newest_author=Subquery(newest.values("created_by__username")[:1]),
            newest_created=Subquery(newest.values("created")[:1]),
        )
        .order_by("name", "id")
    )


def versions_of(*, user: User, mechanism: Mechanism) -> QuerySet[MechanismVersion]:
    """Versions of one mechanism, newest first, without their canonical bytes."""
    require_reader(user=user, project_id=mechanism.project_id)
    found = MechanismVersion.objects.filter(mechanism=mechanism).select_related("mechanism", "created_by")
    return found.defer("canonical").order_by("-number")


def versions_in(*, user: User, project_id: int) -> QuerySet[MechanismVersion]:
    """All mechanism versions of a project, by name and number."""
    require_reader(user=user, project_id=project_id)
    return (
        MechanismVersion.objects.filter(mechanism__project_id=project_id)
        .select_related("mechanism", "created_by")
        .order_by("mechanism__name", "number")
    )


def mechanism_by_id(*, user: User, mechanism_id: int) -> Mechanism:
    """One mechanism that the person may see."""
    found = Mechanism.objects.select_related("project").filter(pk=mechanism_id).first()
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.project_id)
    return found


def version_by_id(*, user: User, version_id: int) -> MechanismVersion:
    """One mechanism version that the person may see."""
    found = MechanismVersion.objects.select_related("mechanism__project", "created_by")
    version = found.filter(pk=version_id).first()
    if version is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=version.mechanism.project_id)
    return version


@lru_cache(maxsize=256)
def _parsed(text: str) -> Network:
    return parse_mechanism(text)


def network_of(version: MechanismVersion) -> Network:
    """The parsed network of a version; kept in memory, since texts never change."""
    return _parsed(version.text)


def mechanisms_called(*, user: User, text: str, project_id: int | None = None) -> QuerySet[Mechanism]:
    """Mechanisms whose name holds the text, of all projects that the person may see or of one.

    Each with its project and its newest version's ``newest_id`` and ``newest_number``.
    """
    newest = MechanismVersion.objects.filter(mechanism=OuterRef("pk")).order_by("-number")
    found = Mechanism.objects.filter(project__in=projects_visible_to(user), name__icontains=text)
    found = found if project_id is None else found.filter(project_id=project_id)
    found = found.annotate(
        newest_id=Subquery(newest.values("pk")[:1]), newest_number=Subquery(newest.values("number")[:1])
    )
    return found.select_related("project").order_by("name", "id")
