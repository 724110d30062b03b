"""Runs as plain values, and what the description says of them."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from rest_framework import serializers

from api.schema import Amount
from kinetics_db.runs.entry import CONTROL_KINDS
from kinetics_db.runs.plain import entry_to_plain
from kinetics_db.runs.selectors import StartConcentration, entry_of, start_concentrations

if TYPE_CHECKING:
    from collections.abc import Iterable

    from kinetics_db.evidence.explanations import Explanations
    from kinetics_db.measurements.rows import RunRow
    from kinetics_db.runs.models import Run, RunRevision


class ChargeSchema(serializers.Serializer):
    """Something put into the vessel: exactly one of compound, lot and stock."""

    compound = serializers.CharField(required=False, allow_null=True, help_text="name")
    lot = serializers.CharField(required=False, allow_null=True, help_text="code")
    stock = serializers.CharField(required=False, allow_null=True, help_text="code")
    amount = Amount()
    note = serializers.CharField(required=False)


class EntryFields(serializers.Serializer):
    """What a person enters for a run; all but code and charges may be left out."""

    total_volume = Amount(required=False, allow_null=True)
    temperature = Amount(required=False, allow_null=True)
    atmosphere = serializers.CharField(required=False)
    started = serializers.CharField(required=False, help_text="ISO date and time of zero, with zone")
    replicate_of = serializers.CharField(required=False, help_text="code of the run that it repeats")
    control_kind = serializers.ChoiceField(CONTROL_KINDS, required=False)
    notes = serializers.CharField(required=False)
    sections = serializers.DictField(
        child=serializers.DictField(), required=False, help_text="vessel, solvent, clock and the others"
    )


class Entry(EntryFields):
    """A run as it was entered."""

    code = serializers.CharField(max_length=80)
    charges = ChargeSchema(many=True, help_text="in order of addition, at most 200")


class NewRun(Entry):
    """A run to be logged."""

    project = serializers.CharField(help_text="short name")


class RunPatch(EntryFields):
    """Changes of a run's entry."""

    charges = ChargeSchema(many=True, required=False)
    reason = serializers.CharField(required=False, help_text="why; needed when the run is sealed")


class StartSchema(serializers.Serializer):
    """What was there of a compound at first contact."""

    compound = serializers.CharField()
    concentration = Amount()


class RunInList(serializers.Serializer):
    """A run in a list."""

    id = serializers.IntegerField()
    project = serializers.CharField()
    code = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    sealed = serializers.DateTimeField(allow_null=True)
    revision = serializers.IntegerField(help_text="number of the newest revision")
    temperature = Amount(allow_null=True)
    start = StartSchema(many=True, help_text="in order of addition")
    control_kind = serializers.ChoiceField(CONTROL_KINDS)
    replicate_of = serializers.CharField(allow_null=True)
    files = serializers.IntegerField()
    tables = serializers.IntegerField(help_text="superseded ones too; 0 when it waits for its file")


class Revision(serializers.Serializer):
    """When what was known of a run was written, by whom and why."""

    number = serializers.IntegerField()
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    reason = serializers.CharField()


class RunDetail(serializers.Serializer):
    """A run as its newest revision has it."""

    id = serializers.IntegerField()
    project = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    sealed = serializers.DateTimeField(allow_null=True)
    revision = Revision()
    entry = Entry()
    start = StartSchema(many=True)


class VersionName(serializers.Serializer):
    """A mechanism version by name."""

    id = serializers.IntegerField()
    mechanism = serializers.CharField()
    number = serializers.IntegerField()


class VerdictSchema(serializers.Serializer):
    """A verdict on a run under one model version."""

    version = VersionName()
    fit_id = serializers.IntegerField()
    fit_status = serializers.CharField()
    dataset_id = serializers.IntegerField()
    dataset = serializers.CharField()
    verdict = serializers.CharField()
    observable = serializers.CharField(help_text="which one decided")
    p_value = serializers.FloatField(allow_null=True, help_text="smallest adjusted p of the runs test")
    nrmse = serializers.FloatField(allow_null=True, help_text="normalised residual")
    pull = serializers.FloatField(allow_null=True, help_text="in standard deviations of its prior")
    pull_name = serializers.CharField()
    table_id = serializers.IntegerField()
    table = serializers.IntegerField(help_text="its number")
    revision = serializers.IntegerField(help_text="of the run, as it was used")
    when = serializers.DateTimeField()
    asked_by = serializers.CharField()
    stale = serializers.ListField(
        child=serializers.CharField(), help_text="why it is no longer current; empty when it is"
    )


class RunExplanations(serializers.Serializer):
    """What explains a run and what does not."""

    run = serializers.IntegerField()
    verdicts = VerdictSchema(many=True, help_text="newest first")
    untried = VersionName(many=True, help_text="versions of the project that were never tried on this run")
    more = serializers.BooleanField(help_text="whether older verdicts were left out")


def plain_explanations(explanations: Explanations) -> dict[str, Any]:
    """Verdicts as they stand."""
    return {
        "run": explanations.run.pk,
        "verdicts": [asdict(verdict) for verdict in explanations.verdicts],
        "untried": [asdict(version) for version in explanations.untried],
        "more": explanations.more,
    }


def plain_row(row: RunRow) -> dict[str, Any]:
    """A run of a list."""
    run = row.run
    return {
        "id": run.pk,
        "project": run.project.slug,
        "code": run.code,
        "created": run.created,
        "created_by": run.created_by.get_username(),
        "sealed": run.sealed,
        "revision": run.latest_number,
        "temperature": _amount(row.temperature, "K", row.temperature_u),
        "start": _starts(row.starts, row.basis),
        "control_kind": run.control_kind,
        "replicate_of": run.replicate_of.code if run.replicate_of is not None else None,
        "files": row.files,
        "tables": row.tables,
    }


def plain_run(run: Run, latest: RunRevision) -> dict[str, Any]:
    """A run with its entry as it was typed and the start concentrations that follow."""
    content = latest.content
    return {
        "id": run.pk,
        "project": run.project.slug,
        "created": run.created,
        "created_by": run.created_by.get_username(),
        "sealed": run.sealed,
        "revision": plain_revision(latest),
        "entry": entry_to_plain(entry_of(latest)),
        "start": _starts(start_concentrations(content), content["basis"]),
    }


def plain_revision(revision: RunRevision) -> dict[str, Any]:
    """A revision without its content."""
    return {
        "number": revision.number,
        "digest": revision.digest,
        "created": revision.created,
        "created_by": revision.created_by.get_username(),
        "reason": revision.reason,
    }


def _starts(starts: Iterable[StartConcentration], basis: str) -> list[dict[str, Any]]:
    unit = "%" if basis == "relative" else "mol/L"
    return [
        {"compound": s.compound, "concentration": _amount(s.value, unit, s.standard_uncertainty)}
        for s in starts
    ]


def _amount(value: float | None, unit: str, uncertainty: float | None) -> dict[str, Any] | None:
    return None if value is None else {"value": value, "unit": unit, "uncertainty": uncertainty or 0.0}
