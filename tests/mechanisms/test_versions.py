"""Versions of a mechanism: numbered, immutable, one for each canonical form."""

from __future__ import annotations

import pytest

from kinetics_db.errors import InvalidInput, NotFound, NotPermitted
from kinetics_db.mechanisms.models import Mechanism, MechanismVersion
from kinetics_db.mechanisms.selectors import network_of, version_by_id, versions_in
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.models import Project
from kinetics_db.provenance.models import AuditEntry
from tests.factories.people import make_member, make_project

pytestmark = pytest.mark.django_db


@pytest.fixture
def project() -> Project:
    return make_project()


def write(project: Project, text: str, name: str = "direct") -> MechanismVersion:
    return write_version(user=project.created_by, project_id=project.pk, name=name, text=text)


def test_versions_are_numbered_in_the_order_of_writing(project: Project) -> None:
    assert [write(project, text).number for text in ("A --k--> B", "A --k--> 2 B", "2 A --k--> B")] == [
        1,
        2,
        3,
    ]


def test_a_change_of_comments_or_order_is_not_a_new_version(project: Project) -> None:
    first = write(project, "A --k_1--> B\nB --k_2--> C")
    again = write(project, "# the same\nB   --k_2-->  C   # second step\nA --k_1--> B")
    assert again.pk == first.pk


def test_the_text_is_kept_as_typed(project: Project) -> None:
    text = "A   --k-->  B  # irreversible"
    version = write(project, text)
    assert MechanismVersion.objects.get(pk=version.pk).text == text
    assert network_of(version).species == ("A", "B")


def test_a_text_with_mistakes_is_refused_with_every_place_and_stores_nothing(project: Project) -> None:
    before = AuditEntry.objects.count()
    with pytest.raises(InvalidInput) as refused:
        write(project, "A --k--> B\nA -> C\nobserve total = [A] + [Bb]")
    lines = sorted({p.line for p in refused.value.problems if p.severity == "error"})
    assert lines == [2, 3]
    assert all(p.column for p in refused.value.problems)
    assert not Mechanism.objects.exists() and AuditEntry.objects.count() == before


def test_a_mechanism_needs_a_name(project: Project) -> None:
    with pytest.raises(InvalidInput, match="needs a name"):
        write(project, "A --k--> B", name="  ")


def test_only_members_see_versions_and_only_contributors_write_them(project: Project) -> None:
    version = write(project, "A --k--> B")
    reader, stranger = make_member(project, "reader"), make_project().created_by
    assert version_by_id(user=reader, version_id=version.pk) == version
    assert list(versions_in(user=reader, project_id=project.pk)) == [version]
    with pytest.raises(NotFound):
        version_by_id(user=stranger, version_id=version.pk)
    with pytest.raises(NotFound):
        versions_in(user=stranger, project_id=project.pk)
    with pytest.raises(NotPermitted):
        write_version(user=reader, project_id=project.pk, name="x", text="A --k--> B")
