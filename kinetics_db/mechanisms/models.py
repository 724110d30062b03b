"""Mechanisms: a named idea and its immutable versions."""

from __future__ import annotations

from django.db import models
from django.db.models import Q

from kinetics_db.provenance.models import ImmutableRecord


class Mechanism(models.Model):
    """A named idea of how the reaction goes."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="mechanisms")
    name = models.CharField(max_length=120)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "name"], name="mechanism_name_once_a_project"),
            models.CheckConstraint(condition=~Q(name=""), name="mechanism_has_a_name"),
        ]

    def __str__(self) -> str:
        return self.name


class MechanismVersion(ImmutableRecord):
    """One text of a mechanism. The digest is over its canonical form, so comments and order do not count."""

    mechanism = models.ForeignKey(Mechanism, on_delete=models.PROTECT, related_name="versions")
    number = models.PositiveIntegerField()
    text = models.TextField(help_text="as typed")
    note = models.CharField(max_length=1000, blank=True, default="")

    class Meta:
        verbose_name = "mechanism version"
        constraints = [
            models.UniqueConstraint(fields=["mechanism", "number"], name="mechanism_version_number"),
            models.UniqueConstraint(fields=["mechanism", "digest"], name="mechanism_version_once"),
        ]

    def __str__(self) -> str:
        return f"{self.mechanism} v{self.number}"
