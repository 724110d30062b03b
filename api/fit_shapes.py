"""Fits, their results and curves as plain values, and what the description says of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from django.urls import reverse
from rest_framework import serializers

from api.run_shapes import VersionName
from kinetics_db.engine.fitting.checks import ERROR_MODELS
from kinetics_db.exchange.tables import plain_values

if TYPE_CHECKING:
    from kinetics_db.fits.curves import RunCurves
    from kinetics_db.fits.models import Fit, FitResult
    from kinetics_db.jobs.models import Job

STATES = ("waiting", "running", "done", "stopped", "failed", "crashed")
STATUSES = ("converged", "stopped", "not converged", "cannot start")
SCOPES = ("same in all runs", "in a group", "own per run", "held")
KINDS = ("constant", "start concentration")


class CastingSchema(serializers.Serializer):
    """Who plays whom; null says that somebody plays no part."""

    compounds = serializers.DictField(
        child=serializers.CharField(allow_null=True), required=False, help_text="species by compound"
    )
    columns = serializers.DictField(
        child=serializers.CharField(allow_null=True), required=False, help_text="observables by column"
    )


class PriorSchema(serializers.Serializer):
    """A normal prior: of ln(value) for what is positive, else of the value."""

    mean = serializers.FloatField(help_text="as a value")
    sd = serializers.FloatField()


class BoundedSchema(serializers.Serializer):
    """What constants and start concentrations have in common."""

    start = serializers.FloatField()
    lower = serializers.FloatField(required=False, allow_null=True)
    upper = serializers.FloatField(required=False, allow_null=True)
    prior = PriorSchema(required=False, allow_null=True)


class FitConstant(BoundedSchema):
    """How a constant enters a fit; its unit follows from mol/L (or percent) and s."""

    name = serializers.CharField()
    scope = serializers.ChoiceField(SCOPES, required=False)
    group_by = serializers.CharField(required=False, allow_null=True, help_text="'temperature'")
    starts = serializers.DictField(
        child=serializers.FloatField(), required=False, help_text="start values of single groups or runs"
    )
    positive = serializers.BooleanField(required=False, help_text="moves on a logarithmic scale")


class FitStart(BoundedSchema):
    """A start concentration that is fitted instead of taken from the charges."""

    species = serializers.CharField()
    scope = serializers.ChoiceField(["own per run", "same in all runs"], required=False)


class FitSettings(serializers.Serializer):
    """How to fit; the reference of fits has the defaults."""

    error_model = serializers.ChoiceField(sorted(ERROR_MODELS), required=False)
    rtol = serializers.FloatField(required=False)
    starts = serializers.IntegerField(required=False)
    seed = serializers.IntegerField(required=False)
    start_spread = serializers.FloatField(required=False)
    max_iterations = serializers.IntegerField(required=False)
    max_steps = serializers.IntegerField(required=False)
    max_seconds = serializers.FloatField(required=False)
    confidence = serializers.FloatField(required=False)


class NewFit(serializers.Serializer):
    """A question; what is left out is as by default, the casting by equal names."""

    dataset = serializers.IntegerField()
    mechanism_version = serializers.IntegerField()
    constants = FitConstant(many=True)
    casting = CastingSchema(required=False)
    start_concentrations = FitStart(many=True, required=False)
    settings = FitSettings(required=False)
    without_owners = serializers.ListField(
        child=serializers.CharField(), required=False, help_text="causes of error that are left out"
    )


class OpenCasting(serializers.Serializer):
    """Who has no namesake, so that a person has to decide."""

    compounds = serializers.ListField(child=serializers.CharField())
    columns = serializers.ListField(child=serializers.CharField())


class ProposedConstant(serializers.Serializer):
    """A constant that needs a start value."""

    name = serializers.CharField()
    unit = serializers.CharField(help_text="'' where none follows from a step")


class ProposedFit(serializers.Serializer):
    """What a request for a fit can be made from."""

    dataset = serializers.IntegerField()
    mechanism_version = serializers.IntegerField()
    casting = CastingSchema(help_text="by equal names")
    undecided = OpenCasting()
    species = serializers.ListField(child=serializers.CharField(), help_text="for compounds")
    observables = serializers.ListField(child=serializers.CharField(), help_text="for columns")
    constants = ProposedConstant(many=True)
    concentration_unit = serializers.ChoiceField(["mol/L", "percent"])
    settings = FitSettings(help_text="the defaults")
    owners = serializers.ListField(child=serializers.CharField(), help_text="causes of error of the data")


class DatasetName(serializers.Serializer):
    """A dataset by name."""

    id = serializers.IntegerField()
    name = serializers.CharField()
    number = serializers.IntegerField()


class FitInList(serializers.Serializer):
    """A fit in a list."""

    id = serializers.IntegerField()
    dataset = DatasetName()
    mechanism_version = VersionName()
    state = serializers.ChoiceField(STATES, allow_null=True, help_text="of the background work")
    progress = serializers.FloatField(allow_null=True, help_text="0 to 1")
    message = serializers.CharField(allow_null=True)
    status = serializers.ChoiceField(STATUSES, allow_null=True, help_text="of the result; null without one")
    seconds = serializers.FloatField(allow_null=True, help_text="that the computation took")
    stale = serializers.BooleanField(help_text="whether data of it have changed since")
    engine = serializers.CharField(help_text="version of the engine")
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    verdicts = serializers.DictField(child=serializers.IntegerField(), help_text="runs by verdict")


class FittedValue(serializers.Serializer):
    """A fitted constant or start concentration with its confidence interval."""

    name = serializers.CharField()
    constant = serializers.CharField()
    where = serializers.CharField(allow_null=True, help_text="group or run; null for all runs")
    value = serializers.FloatField(allow_null=True)
    standard_error = serializers.FloatField(allow_null=True)
    low = serializers.FloatField(allow_null=True)
    high = serializers.FloatField(allow_null=True)
    unit = serializers.CharField()
    determined = serializers.BooleanField()
    why_not = serializers.CharField(allow_null=True, help_text="why it is not determined")


class FitResultSchema(serializers.Serializer):
    """What came out; the reference of fits explains the numbers."""

    status = serializers.ChoiceField(STATUSES)
    message = serializers.CharField()
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    seconds = serializers.FloatField()
    constants = FittedValue(many=True)
    parameters = serializers.ListField(
        child=serializers.DictField(), help_text="all of them, in the order of the covariance"
    )
    covariance = serializers.ListField(
        child=serializers.ListField(child=serializers.FloatField(allow_null=True)),
        help_text="on the fitted scale: of ln(value) where the scale is logarithmic",
    )
    details = serializers.DictField(
        help_text="cost, points, degrees of freedom, sigmas, pulls, minima, libraries and the like"
    )


class FitLinks(serializers.Serializer):
    """Where more of it is."""

    curves = serializers.CharField()
    evidence = serializers.CharField()


class FitDetail(serializers.Serializer):
    """A fit: how far it is, what was asked, what came out."""

    id = serializers.IntegerField()
    project = serializers.CharField()
    dataset = DatasetName()
    mechanism_version = VersionName()
    state = serializers.ChoiceField(STATES, allow_null=True)
    progress = serializers.FloatField(allow_null=True)
    message = serializers.CharField(allow_null=True)
    stale_because = serializers.ListField(child=serializers.CharField())
    engine = serializers.CharField()
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    request = serializers.DictField(help_text="the whole question, as its digest is over")
    result = FitResultSchema(allow_null=True)
    links = FitLinks()


class FitPoints(serializers.Serializer):
    """Measured points beside the model: a row for each time, a value for each observable."""

    times = serializers.ListField(child=serializers.FloatField(), help_text="s")
    observed = serializers.ListField(child=serializers.ListField())
    model = serializers.ListField(child=serializers.ListField())
    standard_uncertainty = serializers.ListField(child=serializers.ListField())
    standardised = serializers.ListField(child=serializers.ListField(), help_text="residuals")


class FitCurve(serializers.Serializer):
    """The model between the points; a row for each time, a value for each observable."""

    times = serializers.ListField(child=serializers.FloatField(), help_text="s")
    values = serializers.ListField(child=serializers.ListField())
    smooth = serializers.BooleanField(help_text="false where only the measured times are known")


class RunOfCurves(serializers.Serializer):
    """A run's points and curve."""

    name = serializers.CharField(help_text="code of the run; 'code (2)' for its second table")
    run = serializers.IntegerField()
    table = serializers.IntegerField()
    observables = serializers.ListField(child=serializers.CharField())
    points = FitPoints()
    curve = FitCurve()


class FitCurves(serializers.Serializer):
    """Points and curves of every run of a fit."""

    fit = serializers.IntegerField()
    unit = serializers.ChoiceField(["mol/L", "percent"])
    runs = RunOfCurves(many=True)


class FitEvidence(serializers.Serializer):
    """Verdicts on a fit, as they were stored."""

    fit = serializers.IntegerField()
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    thresholds = serializers.DictField(child=serializers.FloatField())
    model = serializers.DictField(help_text="information criteria and what they are made of")
    runs = serializers.ListField(
        child=serializers.DictField(), help_text="the verdict on each run, with its tests"
    )


def plain_line(fit: Fit, verdicts: Mapping[str, int]) -> dict[str, Any]:
    """A fit of a list (`fits.selectors.fit_lines`)."""
    line: Any = fit
    return {
        "id": fit.pk,
        **_of_what(fit),
        "state": line.job_state,
        "progress": line.job_progress,
        "message": line.job_message,
        "status": line.result_status,
        "seconds": line.result_seconds,
        "stale": line.stale,
        **_made(fit),
        "verdicts": dict(verdicts),
    }


def plain_fit(fit: Fit, job: Job | None, result: FitResult | None, stale: Sequence[str]) -> dict[str, Any]:
    """A fit with its question, its state and its result."""
    return {
        "id": fit.pk,
        "project": fit.project.slug,
        **_of_what(fit),
        "state": job.state if job is not None else None,
        "progress": job.progress if job is not None else None,
        "message": job.message if job is not None else None,
        "stale_because": list(stale),
        **_made(fit),
        "request": fit.content,
        "result": plain_result(result) if result is not None else None,
        "links": {
            name: reverse(f"api:fit-{name}", kwargs={"fit_id": fit.pk}) for name in ("curves", "evidence")
        },
    }


def plain_result(result: FitResult) -> dict[str, Any]:
    """A result without the curves of its runs."""
    content = result.content
    apart = ("status", "message", "parameters", "covariance", "experiments")
    return {
        "status": content["status"],
        "message": content["message"],
        "digest": result.digest,
        "created": result.created,
        "seconds": result.seconds,
        "constants": [_fitted(p) for p in content["parameters"] if p["kind"] in KINDS],
        "parameters": content["parameters"],
        "covariance": content["covariance"],
        "details": {name: value for name, value in content.items() if name not in apart},
    }


def _fitted(parameter: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "name": parameter["name"],
        "constant": parameter["base"],
        "where": parameter["place"],
        "value": parameter["value"],
        "standard_error": parameter["standard_error"],
        "low": parameter["lower"],
        "high": parameter["upper"],
        "unit": parameter["unit"],
        "determined": parameter["determined"],
        "why_not": parameter["why_not"],
    }


def plain_curves(fit: Fit, result: FitResult, curves: Sequence[RunCurves]) -> dict[str, Any]:
    """Points and curves of every run."""
    stored = result.content["experiments"]
    return {
        "fit": fit.pk,
        "unit": "mol/L" if fit.dataset.basis == "mol/L" else "percent",
        "runs": [_run(one, kept) for one, kept in zip(curves, stored, strict=True)],
    }


def _run(curves: RunCurves, kept: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "name": curves.name,
        "run": curves.run_id,
        "table": curves.table_id,
        "observables": list(curves.observed_names),
        "points": {
            "times": kept["times"],
            "observed": kept["observed"],
            "model": kept["model"],
            "standard_uncertainty": kept["sigma"],
            "standardised": kept["standardised"],
        },
        "curve": {
            "times": plain_values(curves.times),
            "values": [plain_values(row) for row in curves.values],
            "smooth": curves.smooth,
        },
    }


def _of_what(fit: Fit) -> dict[str, Any]:
    dataset, version = fit.dataset, fit.mechanism_version
    return {
        "dataset": {"id": dataset.pk, "name": dataset.name, "number": dataset.number},
        "mechanism_version": {
            "id": version.pk,
            "mechanism": version.mechanism.name,
            "number": version.number,
        },
    }


def _made(fit: Fit) -> dict[str, Any]:
    return {
        "engine": fit.engine_version,
        "digest": fit.digest,
        "created": fit.created,
        "created_by": fit.created_by.get_username(),
    }
