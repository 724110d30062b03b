"""Datasets: a frozen choice of runs and tables to be explained together."""

from __future__ import annotations

from django.db import models
from django.db.models import Q

from kinetics_db.provenance.models import ImmutableRecord


class Dataset(ImmutableRecord):
    """A frozen, hashed choice of table versions with the run revisions they belong to."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="datasets")
    name = models.CharField(max_length=120)
    number = models.PositiveIntegerField()
    basis = models.CharField(max_length=10)

    class Meta:
        verbose_name = "dataset"
        constraints = [
            models.UniqueConstraint(fields=["project", "name", "number"], name="dataset_number"),
            models.UniqueConstraint(fields=["project", "name", "digest"], name="dataset_once"),
            models.CheckConstraint(condition=~Q(name=""), name="dataset_has_a_name"),
            models.CheckConstraint(
                condition=Q(basis__in=["mol/L", "relative"]), name="dataset_basis_is_known"
            ),
        ]

    def __str__(self) -> str:
        return f"{self.name} v{self.number}"


class DatasetItem(models.Model):
    """One run in a dataset: which revision, which table."""

    dataset = models.ForeignKey(Dataset, on_delete=models.PROTECT, related_name="items")
    order = models.PositiveIntegerField()
    run_revision = models.ForeignKey("runs.RunRevision", on_delete=models.PROTECT, related_name="+")
    table = models.ForeignKey(
        "measurements.ConcentrationTable", on_delete=models.PROTECT, related_name="dataset_items"
    )

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["dataset", "order"], name="dataset_item_order"),
            models.UniqueConstraint(fields=["dataset", "table"], name="table_once_a_dataset"),
        ]

    def __str__(self) -> str:
        return f"{self.table} in {self.dataset}"
