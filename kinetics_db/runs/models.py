"""Runs: one reaction carried out once, kept as revisions of a full snapshot."""

from __future__ import annotations

from django.conf import settings
from django.db import models
from django.db.models import F, Q

from kinetics_db.provenance.models import ImmutableRecord


class Run(models.Model):
    """The identity of a run. What is known of it stands in its revisions, the newest one counts."""

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="runs")
    code = models.CharField(max_length=80)
    created = models.DateTimeField(auto_now_add=True)
    created_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    sealed = models.DateTimeField(null=True, blank=True, help_text="from then on changes are amendments")
    latest_number = models.PositiveIntegerField(default=0)
    # From the newest revision, for lists and their filters.
    control_kind = models.CharField(max_length=80, blank=True, default="")
    replicate_of = models.ForeignKey(
        "self", null=True, blank=True, on_delete=models.PROTECT, related_name="replicates"
    )

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "code"], name="run_code_once_a_project"),
            models.CheckConstraint(condition=~Q(code=""), name="run_has_a_code"),
        ]
        indexes = [
            models.Index("project", F("created").desc(), F("id").desc(), name="run_newest"),
            models.Index(F("created").desc(), F("id").desc(), name="run_newest_anywhere"),
        ]

    def __str__(self) -> str:
        return self.code


class RunRevision(ImmutableRecord):
    """A resolved snapshot of everything that the engine reads from a run."""

    run = models.ForeignKey(Run, on_delete=models.PROTECT, related_name="revisions")
    number = models.PositiveIntegerField()
    reason = models.CharField(max_length=1000, blank=True, default="")

    class Meta:
        verbose_name = "run revision"
        constraints = [
            models.UniqueConstraint(fields=["run", "number"], name="run_revision_number"),
            models.CheckConstraint(condition=Q(number__gte=1), name="run_revisions_count_from_one"),
        ]

    def __str__(self) -> str:
        return f"{self.run} r{self.number}"


class RunCharge(models.Model):
    """What went into a revision, in order of addition: the relational copy, for foreign keys and queries."""

    revision = models.ForeignKey(RunRevision, on_delete=models.PROTECT, related_name="charges")
    order = models.PositiveSmallIntegerField()
    compound_revision = models.ForeignKey(
        "materials.CompoundRevision", null=True, on_delete=models.PROTECT, related_name="+"
    )
    lot_revision = models.ForeignKey(
        "materials.LotRevision", null=True, on_delete=models.PROTECT, related_name="+"
    )
    stock_revision = models.ForeignKey(
        "materials.StockRevision", null=True, on_delete=models.PROTECT, related_name="+"
    )

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["revision", "order"], name="one_charge_an_order"),
            models.CheckConstraint(
                condition=Q(compound_revision__isnull=False, stock_revision__isnull=True)
                | Q(compound_revision__isnull=True, lot_revision__isnull=True, stock_revision__isnull=False),
                name="charge_is_a_compound_or_a_stock",
            ),
        ]

    def __str__(self) -> str:
        return f"charge {self.order} of {self.revision}"


class RunCondition(models.Model):
    """A number by which runs are searched, derived from the newest revision, e.g. 'c0:lactone' in mol/L.

    Runs in percent have 'percent:lactone' in its place, so that nobody finds 100 % as 100 mol/L.
    """

    run = models.ForeignKey(Run, on_delete=models.PROTECT, related_name="conditions")
    key = models.CharField(max_length=140)
    value = models.FloatField()

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["run", "key"], name="one_value_a_condition"),
            models.CheckConstraint(
                condition=Q(value__gte=-1e300, value__lte=1e300), name="condition_is_finite"
            ),
        ]
        indexes = [models.Index(fields=["key", "value", "run"], name="condition_search")]

    def __str__(self) -> str:
        return f"{self.run_id} {self.key} = {self.value}"
