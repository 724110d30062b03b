"""Global fits: the request, pinned and hashed, and its one result."""

from __future__ import annotations

from django.db import models
from django.db.models import F, Q

from kinetics_db.provenance.constraints import finite
from kinetics_db.provenance.models import ImmutableRecord


class Fit(ImmutableRecord):
    """What was asked: a dataset, a mechanism version, a casting, constants, settings, seed, engine version.

    The digest is the request's hash; the same request in a project is the same fit.
    """

    project = models.ForeignKey("projects.Project", on_delete=models.PROTECT, related_name="fits")
    dataset = models.ForeignKey("datasets.Dataset", on_delete=models.PROTECT, related_name="fits")
    mechanism_version = models.ForeignKey(
        "mechanisms.MechanismVersion", on_delete=models.PROTECT, related_name="fits"
    )
    engine_version = models.CharField(max_length=40)

    class Meta:
        verbose_name = "fit"
        constraints = [models.UniqueConstraint(fields=["project", "digest"], name="same_request_same_fit")]
        indexes = [models.Index("project", F("created").desc(), F("id").desc(), name="fit_newest")]

    def __str__(self) -> str:
        return f"fit {self.pk}: {self.mechanism_version} on {self.dataset}"


class FitResult(ImmutableRecord):
    """What came out. Non-convergence is a result too and keeps its best point."""

    class Status(models.TextChoices):
        CONVERGED = "converged"
        STOPPED = "stopped"
        NOT_CONVERGED = "not converged"
        CANNOT_START = "cannot start"

    fit = models.ForeignKey(Fit, on_delete=models.PROTECT, related_name="results")
    attempt = models.PositiveIntegerField(help_text="token of the attempt that computed it")
    status = models.CharField(max_length=20, choices=Status)
    cost = models.FloatField(null=True)
    residual_sum = models.FloatField(null=True)
    seconds = models.FloatField()

    class Meta:
        verbose_name = "fit result"
        constraints = [
            finite("fit_result_is_finite", "cost", "residual_sum"),
            models.UniqueConstraint(fields=["fit", "attempt"], name="one_result_an_attempt"),
            models.UniqueConstraint(
                fields=["fit"],
                condition=Q(status__in=["converged", "not converged"]),
                name="one_finished_result_a_fit",
            ),
            models.CheckConstraint(
                condition=Q(status__in=["converged", "stopped", "not converged", "cannot start"]),
                name="fit_status_is_known",
            ),
            models.CheckConstraint(
                condition=Q(seconds__gte=0.0, seconds__lte=1e9), name="fit_seconds_are_finite"
            ),
        ]

    def __str__(self) -> str:
        return f"result of fit {self.fit_id}: {self.status}"


class FittedConstant(models.Model):
    """A constant of a result, for queries and tables without opening the result."""

    result = models.ForeignKey(FitResult, on_delete=models.PROTECT, related_name="constants")
    name = models.CharField(max_length=200)
    constant = models.CharField(max_length=120)
    where = models.CharField(
        max_length=120, blank=True, default="", help_text="group or run; blank: all runs"
    )
    value = models.FloatField(null=True)
    standard_error = models.FloatField(null=True)
    low = models.FloatField(null=True)
    high = models.FloatField(null=True)
    unit = models.CharField(max_length=40, blank=True, default="")
    determined = models.BooleanField()

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["result", "name"], name="constant_once_a_result"),
            finite("fitted_constant_is_finite", "value", "standard_error", "low", "high"),
        ]

    def __str__(self) -> str:
        return f"{self.name} = {self.value}"
