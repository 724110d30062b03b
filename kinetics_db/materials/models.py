"""Compounds, lots and stock solutions. The row is the identity; what is known of it stands in revisions."""

from __future__ import annotations

from django.db import models
from django.db.models import Q

from kinetics_db.provenance.models import ImmutableRecord


class Compound(models.Model):
    """A substance as the project calls it."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="compounds")
    name = models.CharField(max_length=120)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "name"], name="compound_name_once_a_project"),
            models.CheckConstraint(condition=~Q(name=""), name="compound_has_a_name"),
        ]

    def __str__(self) -> str:
        return self.name


class Lot(models.Model):
    """One bottle of a compound."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="lots")
    compound = models.ForeignKey(Compound, on_delete=models.PROTECT, related_name="lots")
    code = models.CharField(max_length=80)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "code"], name="lot_code_once_a_project"),
            models.CheckConstraint(condition=~Q(code=""), name="lot_has_a_code"),
        ]

    def __str__(self) -> str:
        return self.code


class Stock(models.Model):
    """A solution made up from lots."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="stocks")
    code = models.CharField(max_length=80)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "code"], name="stock_code_once_a_project"),
            models.CheckConstraint(condition=~Q(code=""), name="stock_has_a_code"),
        ]

    def __str__(self) -> str:
        return self.code


class MaterialRevision(ImmutableRecord):
    """What was known of a material when the revision was written."""

    number = models.PositiveIntegerField()
    reason = models.CharField(max_length=1000, blank=True, default="")

    class Meta(ImmutableRecord.Meta):
        abstract = True


class CompoundRevision(MaterialRevision):
    """Formula, molar mass, density, hazard statements."""

    compound = models.ForeignKey(Compound, on_delete=models.PROTECT, related_name="revisions")

    class Meta(MaterialRevision.Meta):
        abstract = False
        constraints = [
            models.UniqueConstraint(fields=["compound", "number"], name="compound_revision_number"),
        ]

    def __str__(self) -> str:
        return f"{self.compound} r{self.number}"


class LotRevision(MaterialRevision):
    """Purity with its uncertainty, supplier, date."""

    lot = models.ForeignKey(Lot, on_delete=models.PROTECT, related_name="revisions")
    compound_revision = models.ForeignKey(CompoundRevision, on_delete=models.PROTECT, related_name="+")

    class Meta(MaterialRevision.Meta):
        abstract = False
        constraints = [models.UniqueConstraint(fields=["lot", "number"], name="lot_revision_number")]

    def __str__(self) -> str:
        return f"{self.lot} r{self.number}"


class StockRevision(MaterialRevision):
    """Recipe and resulting concentrations with their uncertainties."""

    stock = models.ForeignKey(Stock, on_delete=models.PROTECT, related_name="revisions")

    class Meta(MaterialRevision.Meta):
        abstract = False
        constraints = [models.UniqueConstraint(fields=["stock", "number"], name="stock_revision_number")]

    def __str__(self) -> str:
        return f"{self.stock} r{self.number}"


class StockComponent(models.Model):
    """A compound in a stock: the relational copy of its recipe, for queries and foreign keys."""

    revision = models.ForeignKey(StockRevision, on_delete=models.PROTECT, related_name="components")
    compound_revision = models.ForeignKey(CompoundRevision, on_delete=models.PROTECT, related_name="+")
    lot_revision = models.ForeignKey(LotRevision, null=True, on_delete=models.PROTECT, related_name="+")
    concentration = models.FloatField(help_text="mol/L")

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["revision", "compound_revision"], name="compound_once_a_stock"),
            models.CheckConstraint(
                condition=Q(concentration__gte=0.0, concentration__lte=1e3),
                name="stock_concentration_is_finite",
            ),
        ]

    def __str__(self) -> str:
        return f"{self.compound_revision} in {self.revision}"
