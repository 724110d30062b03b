"""Predictions: curves of a fitted model at other conditions, kept with what they came from."""

from __future__ import annotations

from django.db import models

from kinetics_db.provenance.models import ImmutableRecord


class Prediction(ImmutableRecord):
    """A kinetic estimate made from a fit result for stated conditions."""

    result = models.ForeignKey("fits.FitResult", on_delete=models.PROTECT, related_name="predictions")
    extrapolated = models.BooleanField(help_text="outside the range of the fitted data")

    class Meta:
        verbose_name = "prediction"
        constraints = [models.UniqueConstraint(fields=["result", "digest"], name="prediction_once")]

    def __str__(self) -> str:
        return f"prediction {self.pk} from {self.result}"
