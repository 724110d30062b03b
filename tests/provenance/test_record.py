"""Immutable records, canonical bytes, lineage, audit."""

from __future__ import annotations

import pytest
from django.db import transaction

from kinetics_db.accounts.services import create_user
from kinetics_db.engine.canonical import canonical_json, sha256_hex
from kinetics_db.errors import Conflict
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.provenance import writing
from kinetics_db.provenance.models import AuditEntry, AuditHead, Derivation
from kinetics_db.provenance.selectors import chain_breaks, lineage
from tests.factories.people import make_member, make_project

pytestmark = pytest.mark.django_db


def two_versions():  # type: ignore[no-untyped-def]
    project = make_project()
    user = project.created_by
    first = write_version(user=user, project_id=project.pk, name="direct", text="A --k--> B")
    second = write_version(user=user, project_id=project.pk, name="direct", text="A --k--> B\nB --k_2--> C")
    return project, first, second


def test_a_records_digest_is_over_its_stored_bytes() -> None:
    _, first, _ = two_versions()
    stored = MechanismVersion.objects.get(pk=first.pk)
    assert sha256_hex(bytes(stored.canonical)) == stored.digest
    assert bytes(stored.canonical) == canonical_json(stored.content)


def test_the_digest_of_a_mechanism_is_the_same_on_every_database() -> None:
    _, first, _ = two_versions()
    # Golden value: raise the format's number in the canonical form if this has to change.
    assert first.digest == "a62a1cb41bcc023e45ba57d8fa2be427be1c4e05a8ce25cf33caa4721dbb1b70"


def test_a_stored_record_cannot_be_saved_again() -> None:
    _, first, _ = two_versions()
    first.text = "A --k--> C"
    with pytest.raises(Conflict, match="immutable"):
        first.save()


def test_a_stored_record_cannot_be_deleted_or_changed_in_bulk() -> None:
    _, first, _ = two_versions()
    with pytest.raises(Conflict, match="never deleted"):
        first.delete()
    with pytest.raises(Conflict, match="immutable"):
        MechanismVersion.objects.filter(pk=first.pk).update(text="other")
    with pytest.raises(Conflict, match="never deleted"):
        MechanismVersion.objects.filter(pk=first.pk).delete()


def test_a_record_cannot_be_written_where_no_audit_entry_would_tell_of_it() -> None:
    _, first, _ = two_versions()
    with pytest.raises(RuntimeError, match="recording"):
        MechanismVersion(mechanism=first.mechanism, number=9, text="x", created_by=first.created_by).save()


def test_lineage_goes_up_and_down() -> None:
    _, first, second = two_versions()
    up = lineage(kind="mechanism version", record_id=second.pk, upward=True)
    down = lineage(kind="mechanism version", record_id=first.pk, upward=False)
    assert [(link.child[1], link.parent[1]) for link in up] == [(second.pk, first.pk)]
    assert up == down


def test_lineage_of_a_diamond_names_every_arrow_once() -> None:
    for child, parent in [(2, 1), (3, 1), (4, 2), (4, 3)]:
        Derivation.objects.create(child_kind="x", child_id=child, parent_kind="x", parent_id=parent)
    up = lineage(kind="x", record_id=4, upward=True)
    assert sorted((link.child[1], link.parent[1]) for link in up) == [(2, 1), (3, 1), (4, 2), (4, 3)]


def test_every_write_has_one_audit_entry_in_an_unbroken_chain() -> None:
    two_versions()
    verbs = list(AuditEntry.objects.order_by("sequence").values_list("verb", "record_kind"))
    assert verbs == [
        ("made", "account"),
        ("made", "project"),
        ("made", "mechanism"),
        ("made", "mechanism version"),
        ("made", "mechanism version"),
    ]
    assert chain_breaks() == []
    assert AuditHead.objects.get().sequence == 5


def test_a_write_that_is_rolled_back_leaves_no_audit_entry() -> None:
    project, _, _ = two_versions()
    before = AuditEntry.objects.count()
    with pytest.raises(ZeroDivisionError), writing.recording(user=project.created_by):
        write_version(user=project.created_by, project_id=project.pk, name="other", text="A --k--> C")
        raise ZeroDivisionError
    assert AuditEntry.objects.count() == before
    assert not MechanismVersion.objects.filter(mechanism__name="other").exists()
    assert chain_breaks() == []


@pytest.mark.parametrize("field", ["verb", "record_label", "actor", "reason", "digest_after"])
def test_a_changed_audit_entry_is_found(field: str) -> None:
    two_versions()
    _raw_update(AuditEntry, 3, field, "changed")
    assert chain_breaks() == ["audit entry 3 has been changed"]


def test_a_deleted_audit_entry_is_found() -> None:
    from django.db import connection

    two_versions()
    with connection.cursor() as cursor:
        cursor.execute(f"DELETE FROM {AuditEntry._meta.db_table} WHERE sequence = 2")
    assert "audit entry 2 is missing before 3" in chain_breaks()


def test_a_nested_frame_appends_with_the_outermost_one() -> None:
    project, _, _ = two_versions()
    with writing.recording(user=project.created_by):
        write_version(user=project.created_by, project_id=project.pk, name="a", text="A --k--> C")
        inside = AuditEntry.objects.count()
    assert AuditEntry.objects.count() == inside + 2
    assert not transaction.get_connection().needs_rollback


def _raw_update(model, sequence: int, field: str, value: object) -> None:  # type: ignore[no-untyped-def]
    from django.db import connection

    with connection.cursor() as cursor:
        cursor.execute(
            f"UPDATE {model._meta.db_table} SET {field} = %s WHERE sequence = %s", [value, sequence]
        )


def test_a_write_that_was_given_up_inside_another_leaves_no_entry() -> None:
    project, _, _ = two_versions()
    user = project.created_by
    before = AuditEntry.objects.count()
    with writing.recording(user=user):
        with pytest.raises(ZeroDivisionError), writing.recording(user=user):
            write_version(user=user, project_id=project.pk, name="gone", text="A --k--> C")
            raise ZeroDivisionError
        write_version(user=user, project_id=project.pk, name="kept", text="A --k--> C")
    labels = AuditEntry.objects.filter(sequence__gt=before).values_list("record_label", flat=True)
    assert sorted(labels) == ["kept", "kept v1"]
    assert chain_breaks() == []


def test_each_entry_names_who_acted_in_its_own_frame() -> None:
    project, _, _ = two_versions()
    other = make_member(project, "contributor")
    with writing.recording(user=project.created_by):
        write_version(user=other, project_id=project.pk, name="theirs", text="A --k--> C")
    entry = AuditEntry.objects.get(record_label="theirs v1")
    assert (entry.actor, entry.user) == (other.get_username(), other)


def test_an_account_made_for_somebody_names_its_maker() -> None:
    owner = make_project().created_by
    with writing.recording(user=owner):
        create_user(username="newcomer", password="a long enough phrase 9")
    assert AuditEntry.objects.get(record_label="newcomer").actor == owner.get_username()


def test_a_missing_head_is_found_and_stops_further_writes() -> None:
    project, _, _ = two_versions()
    AuditHead.objects.all().delete()
    assert chain_breaks() == [f"the chain's head is missing, the last entry is {AuditEntry.objects.count()}"]
    with pytest.raises(Conflict, match="end of the audit chain is missing"):
        write_version(user=project.created_by, project_id=project.pk, name="a", text="A --k--> C")


def test_a_changed_user_of_an_audit_entry_is_found() -> None:
    project, _, _ = two_versions()
    other = make_member(project, "reader")
    _raw_update(AuditEntry, 3, "user_id", other.pk)
    assert chain_breaks() == ["audit entry 3 has been changed"]
