"""From instrument bytes to concentrations: files, signal tables, reductions, concentration tables."""

from __future__ import annotations

from django.db import models
from django.db.models import F, Q

from kinetics_db.engine.tables import Table
from kinetics_db.provenance.constraints import finite
from kinetics_db.provenance.models import ImmutableRecord


class InstrumentFile(ImmutableRecord):
    """Original bytes of an instrument, as one project knows them."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="instrument_files")
    run = models.ForeignKey("runs.Run", on_delete=models.PROTECT, related_name="instrument_files")
    stored = models.ForeignKey("provenance.StoredBytes", on_delete=models.PROTECT, related_name="+")
    name = models.CharField(max_length=255)

    class Meta:
        verbose_name = "instrument file"
        constraints = [
            models.UniqueConstraint(fields=["run", "stored", "name"], name="file_once_a_run"),
            models.CheckConstraint(condition=~Q(name=""), name="file_has_a_name"),
        ]

    def __str__(self) -> str:
        return self.name


class StoredTable(ImmutableRecord):
    """A table kept as one blob in its own canonical bytes (`engine.tables`).

    The record's content holds the blob's SHA-256 beside how the table was made, so its digest covers both.
    """

    blob = models.BinaryField(editable=False)
    rows = models.PositiveIntegerField()
    first_time = models.FloatField(null=True, help_text="s")
    last_time = models.FloatField(null=True, help_text="s")

    class Meta(ImmutableRecord.Meta):
        abstract = True

    @property
    def table(self) -> Table:
        """The numbers."""
        return Table.from_bytes(bytes(self.blob))


class SignalTable(StoredTable):
    """Times and signals as read from a file, with how they were read."""

    file = models.ForeignKey(InstrumentFile, on_delete=models.PROTECT, related_name="signal_tables")
    number = models.PositiveIntegerField()
    reader = models.CharField(max_length=60)
    reader_options = models.JSONField(default=dict)
    notes = models.JSONField(default=list, help_text="every interpretation the reader made")

    class Meta:
        verbose_name = "signal table"
        constraints = [
            models.UniqueConstraint(fields=["file", "number"], name="signal_table_number"),
            finite("signal_times_are_finite", "first_time", "last_time"),
        ]

    def __str__(self) -> str:
        return f"{self.file} s{self.number}"


class Reduction(ImmutableRecord):
    """One version of a recipe that turns signals into concentrations."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="reductions")
    name = models.CharField(max_length=120)
    number = models.PositiveIntegerField()
    method = models.CharField(max_length=60)

    class Meta:
        verbose_name = "reduction"
        constraints = [
            models.UniqueConstraint(fields=["project", "name", "number"], name="reduction_number"),
            models.UniqueConstraint(fields=["project", "name", "digest"], name="reduction_once"),
            models.CheckConstraint(condition=~Q(name=""), name="reduction_has_a_name"),
        ]

    def __str__(self) -> str:
        return f"{self.name} v{self.number}"


class ConcentrationTable(StoredTable):
    """Times and concentrations with standard uncertainties, in the vessel at that time."""

    class Basis(models.TextChoices):
        MOLAR = "mol/L"
        RELATIVE = "relative"

    run = models.ForeignKey("runs.Run", on_delete=models.PROTECT, related_name="concentration_tables")
    signal_table = models.ForeignKey(
        SignalTable, on_delete=models.PROTECT, related_name="concentration_tables"
    )
    reduction = models.ForeignKey(Reduction, on_delete=models.PROTECT, related_name="concentration_tables")
    number = models.PositiveIntegerField()
    basis = models.CharField(max_length=10, choices=Basis)
    scale_errors = models.JSONField(default=list, help_text="common scale errors: owner, relative_u, columns")
    notes = models.JSONField(default=list)

    class Meta:
        verbose_name = "concentration table"
        constraints = [
            models.UniqueConstraint(fields=["run", "number"], name="concentration_table_number"),
            finite("concentration_times_are_finite", "first_time", "last_time"),
            models.UniqueConstraint(fields=["signal_table", "reduction"], name="one_table_a_reduction"),
            models.CheckConstraint(condition=Q(basis__in=["mol/L", "relative"]), name="table_basis_is_known"),
        ]

    def __str__(self) -> str:
        return f"{self.run} t{self.number}"


class TableColumn(models.Model):
    """A column of a concentration table, for queries without opening the blob."""

    table = models.ForeignKey(ConcentrationTable, on_delete=models.PROTECT, related_name="columns")
    name = models.CharField(max_length=120)
    unit = models.CharField(max_length=40)
    values = models.PositiveIntegerField(help_text="values that are not missing")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["table", "name"], name="column_once_a_table")]
        indexes = [models.Index(F("name"), name="column_by_name")]

    def __str__(self) -> str:
        return self.name


class TableSupersession(ImmutableRecord):
    """A newer table of the same run replaces an older one; the older one stays."""

    older = models.OneToOneField(ConcentrationTable, on_delete=models.PROTECT, related_name="superseded_by")
    newer = models.ForeignKey(ConcentrationTable, on_delete=models.PROTECT, related_name="supersedes")
    reason = models.CharField(max_length=1000)

    class Meta:
        verbose_name = "table supersession"
        constraints = [
            models.CheckConstraint(condition=~Q(older=F("newer")), name="no_table_supersedes_itself"),
        ]

    def __str__(self) -> str:
        return f"{self.newer} supersedes {self.older}"
