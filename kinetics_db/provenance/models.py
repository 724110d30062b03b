"""The base of the record: immutable rows with canonical bytes, stored bytes, lineage, the audit chain."""

from __future__ import annotations

import json
from typing import Any

from django.conf import settings
from django.db import models
from django.db.models import F, Q

from kinetics_db.errors import Conflict


class RecordQuerySet(models.QuerySet):
    """Immutable rows cannot be changed in bulk either."""

    def update(self, **kwargs: Any) -> int:
        raise Conflict(f"{self.model.__name__} records are immutable; make a new revision")

    def delete(self) -> tuple[int, dict[str, int]]:
        raise Conflict(f"{self.model.__name__} records are never deleted")


class ImmutableRecord(models.Model):
    """A row that is written once, by `provenance.services.save_record`, inside `recording()`.

    ``canonical`` are the bytes that ``digest`` (SHA-256) is over: values and the digests of parents, never
    database ids, paths or clock times.
    """

    digest = models.CharField(max_length=64, editable=False)
    canonical = models.BinaryField(editable=False)
    created = models.DateTimeField(auto_now_add=True)
    created_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")

    objects = RecordQuerySet.as_manager()

    class Meta:
        abstract = True

    @property
    def content(self) -> dict[str, Any]:
        """The plain values that the digest is over."""
        return dict(json.loads(bytes(self.canonical)))

    @classmethod
    def kind(cls) -> str:
        """The record's kind as it stands in lineage and audit rows, e.g. 'run revision'."""
        return str(cls._meta.verbose_name)

    def save(self, *args: Any, **kwargs: Any) -> None:
        if self.pk is not None or kwargs.get("force_update"):
            raise Conflict(f"{self.kind()} records are immutable")
        from kinetics_db.provenance.writing import require_recording

        require_recording(self.kind())
        super().save(*args, **kwargs)

    def delete(self, *args: Any, **kwargs: Any) -> tuple[int, dict[str, int]]:
        raise Conflict(f"{self.kind()} records are never deleted")


class StoredBytes(models.Model):
    """Bytes kept once, under their SHA-256, whoever uploaded them."""

    sha256 = models.CharField(max_length=64, unique=True)
    size = models.BigIntegerField()
    created = models.DateTimeField(auto_now_add=True)

    class Meta:
        verbose_name_plural = "stored bytes"
        constraints = [
            models.CheckConstraint(condition=Q(size__gte=0), name="stored_bytes_have_a_size"),
        ]

    def __str__(self) -> str:
        return self.sha256


class Derivation(models.Model):
    """Child was made from parent: a copy of the typed foreign keys, so that lineage is one recursive query."""

    child_kind = models.CharField(max_length=40)
    child_id = models.BigIntegerField()
    parent_kind = models.CharField(max_length=40)
    parent_id = models.BigIntegerField()

    class Meta:
        constraints = [
            models.UniqueConstraint(
                fields=["child_kind", "child_id", "parent_kind", "parent_id"], name="derivation_once"
            ),
            models.CheckConstraint(
                condition=~Q(child_kind=F("parent_kind")) | ~Q(child_id=F("parent_id")),
                name="nothing_derives_from_itself",
            ),
        ]
        indexes = [models.Index(fields=["parent_kind", "parent_id"], name="derivation_down")]

    def __str__(self) -> str:
        return f"{self.child_kind} {self.child_id} from {self.parent_kind} {self.parent_id}"


class AuditHead(models.Model):
    """The one row that says where the audit chain ends; its lock puts writers in line."""

    singleton = models.BooleanField(default=True, unique=True)
    sequence = models.BigIntegerField(default=0)
    digest = models.CharField(max_length=64, default="0" * 64)

    class Meta:
        constraints = [models.CheckConstraint(condition=Q(singleton=True), name="one_audit_head")]

    def __str__(self) -> str:
        return f"{self.sequence} {self.digest}"


class AuditEntry(models.Model):
    """Who did what to which record, when and why; each entry carries the digest of the one before."""

    sequence = models.BigIntegerField(unique=True)
    at = models.DateTimeField()
    actor = models.CharField(max_length=220, help_text="user and token name, as they were then")
    user = models.ForeignKey(settings.AUTH_USER_MODEL, null=True, on_delete=models.PROTECT, related_name="+")
    verb = models.CharField(max_length=40)
    project_id = models.BigIntegerField(
        null=True, db_index=True, help_text="no foreign key: projects stand above"
    )
    record_kind = models.CharField(max_length=40)
    record_id = models.BigIntegerField(null=True)
    record_label = models.CharField(max_length=200, blank=True, default="")
    reason = models.CharField(max_length=1000, blank=True, default="")
    digest_before = models.CharField(max_length=64, blank=True, default="")
    digest_after = models.CharField(max_length=64, blank=True, default="")
    previous = models.CharField(max_length=64)
    digest = models.CharField(max_length=64, unique=True)

    objects = RecordQuerySet.as_manager()

    class Meta:
        verbose_name_plural = "audit entries"
        indexes = [models.Index(fields=["record_kind", "record_id"], name="audit_of_record")]

    def __str__(self) -> str:
        return f"{self.sequence}: {self.actor} {self.verb} {self.record_kind} {self.record_label}"

    def save(self, *args: Any, **kwargs: Any) -> None:
        if self.pk is not None:
            raise Conflict("audit entries are immutable")
        super().save(*args, **kwargs)
