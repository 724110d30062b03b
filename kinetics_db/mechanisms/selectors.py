"""Reads about mechanisms."""

from __future__ import annotations

from functools import lru_cache

from django.db.models import QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.engine.network import Network, parse_mechanism
from kinetics_db.errors import NotFound
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.projects.selectors import NOT_VISIBLE, require_reader


def versions_in(*, user: User, project_id: int) -> QuerySet[MechanismVersion]:
    """All mechanism versions of a project, by name and number."""
    require_reader(user=user, project_id=project_id)
    return (
        MechanismVersion.objects.filter(mechanism__project_id=project_id)
        .select_related("mechanism", "created_by")
        .order_by("mechanism__name", "number")
    )


def version_by_id(*, user: User, version_id: int) -> MechanismVersion:
    """One mechanism version that the person may see."""
    version = MechanismVersion.objects.select_related("mechanism").filter(pk=version_id).first()
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
