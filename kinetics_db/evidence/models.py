"""Evidence: how well a model version explains each run, and how the versions compare."""

from __future__ import annotations

from django.db import models
from django.db.models import Q

from kinetics_db.provenance.constraints import finite
from kinetics_db.provenance.models import ImmutableRecord

VERDICTS = ("not tested", "agrees", "consistent", "strained", "disagrees")
"""From the best to the worst."""


class ModelEvidence(ImmutableRecord):
    """Evidence of one fit result as a whole, with the thresholds it was judged by."""

    result = models.OneToOneField("fits.FitResult", on_delete=models.PROTECT, related_name="evidence")
    aicc = models.FloatField(null=True)
    bic = models.FloatField(null=True)
    data_key = models.CharField(max_length=64, help_text="equal where points and weights are the same")

    class Meta:
        verbose_name = "model evidence"
        constraints = [finite("model_evidence_is_finite", "aicc", "bic")]

    def __str__(self) -> str:
        return f"evidence of {self.result}"


class RunEvidence(models.Model):
    """Verdict of one run under one fit result: the relational copy, for the grid."""

    evidence = models.ForeignKey(ModelEvidence, on_delete=models.PROTECT, related_name="runs")
    run_revision = models.ForeignKey("runs.RunRevision", on_delete=models.PROTECT, related_name="+")
    table = models.ForeignKey("measurements.ConcentrationTable", on_delete=models.PROTECT, related_name="+")
    verdict = models.CharField(max_length=12)
    observable = models.CharField(max_length=120, blank=True, default="", help_text="the one that decided")
    p_value = models.FloatField(null=True, help_text="smallest adjusted p of that observable")
    nrmse = models.FloatField(null=True, help_text="of that observable")
    pull = models.FloatField(null=True, help_text="farthest pull of the run's nuisance parameters")
    pull_name = models.CharField(max_length=300, blank=True, default="")

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["evidence", "table"], name="one_verdict_a_table"),
            finite("run_evidence_is_finite", "p_value", "nrmse", "pull"),
            models.CheckConstraint(condition=Q(verdict__in=VERDICTS), name="verdict_is_known"),
        ]

    def __str__(self) -> str:
        return f"{self.run_revision}: {self.verdict}"
