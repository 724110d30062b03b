"""Logging a run, revising it, sealing it."""

from __future__ import annotations

from django.db.models.functions import Now

from kinetics_db.accounts.models import User
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import Conflict, InvalidInput
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import note_write, recording, save_record
from kinetics_db.runs.entry import RunEntry
from kinetics_db.runs.models import Run, RunCharge, RunCondition, RunRevision
from kinetics_db.runs.services.cleaning import cleaned
from kinetics_db.runs.services.snapshot import Resolved, resolve


def log_run(*, user: User, project_id: int, entry: RunEntry) -> RunRevision:
    """Log a new run as its first revision. InvalidInput holds every problem; nothing is stored then."""
    require_contributor(user=user, project_id=project_id)
    entry = cleaned(entry)
    with recording(user=user):
        lock_project(project_id)
        if Run.objects.filter(project_id=project_id, code=entry.code).exists():
            raise InvalidInput(f"there is a run '{entry.code}' already", field="code", cure="another code")
        resolved = resolve(entry, project_id=project_id)
        run = Run.objects.create(project_id=project_id, code=entry.code, created_by=user)
        note_write(verb="made", record_kind="run", record_id=run.pk, project_id=project_id, label=run.code)
        return _next_revision(run, resolved, user=user, reason="", latest=None)


def revise_run(*, user: User, run: Run, entry: RunEntry, based_on: int, reason: str = "") -> RunRevision:
    """Write the next revision of a run.

    ``based_on`` is the number of the revision that the editor saw: Conflict when somebody else was first.
    A sealed run asks for a reason. An entry that changes nothing gives the newest revision back.
    """
    require_contributor(user=user, project_id=run.project_id)
    entry = cleaned(entry)
    reason = plain_text(reason, field="reason")
    with recording(user=user):
        lock_project(run.project_id)
        run = Run.objects.get(pk=run.pk)
        if entry.code != run.code:
            raise InvalidInput("a run keeps its code", field="code", cure=run.code)
        latest = run.revisions.get(number=run.latest_number)
        if based_on != latest.number:
            raise Conflict(
                f"run {run.code} was changed meanwhile: you saw revision {based_on}, the newest is {latest.number}"
            )
        if run.sealed and not reason:
            raise InvalidInput("the run is sealed", field="reason", cure="say why it is amended")
        resolved = resolve(entry, project_id=run.project_id)
        if digest(resolved.content) == latest.digest:
            return latest
        return _next_revision(run, resolved, user=user, reason=reason, latest=latest)


def seal_run(*, user: User, run: Run) -> Run:
    """Declare a run complete: later changes are amendments with a reason."""
    require_contributor(user=user, project_id=run.project_id)
    with recording(user=user):
        lock_project(run.project_id)
        if not Run.objects.filter(pk=run.pk, sealed__isnull=True).update(sealed=Now()):
            raise Conflict(f"run {run.code} is sealed already")
        note_write(
            verb="sealed", record_kind="run", record_id=run.pk, project_id=run.project_id, label=run.code
        )
    run.refresh_from_db()
    return run


def _next_revision(
    run: Run, resolved: Resolved, *, user: User, reason: str, latest: RunRevision | None
) -> RunRevision:
    number = (latest.number if latest else 0) + 1
    parents = [record for source in resolved.sources for record in source.records]
    revision = save_record(
        RunRevision(run=run, number=number, reason=reason),
        user=user,
        content=resolved.content,
        parents=[*parents, *([latest] if latest else [])],
        project_id=run.project_id,
        label=f"{run.code} r{number}",
        verb="revised" if latest else "logged",
        reason=reason,
        digest_before=latest.digest if latest else "",
    )
    RunCharge.objects.bulk_create(
        RunCharge(
            revision=revision,
            order=order,
            compound_revision=source.compound,
            lot_revision=source.lot,
            stock_revision=source.stock,
        )
        for order, source in enumerate(resolved.sources, start=1)
    )
    RunCondition.objects.filter(run=run).delete()
    RunCondition.objects.bulk_create(
        RunCondition(run=run, key=key, value=value) for key, value in resolved.conditions.items()
    )
    content = resolved.content
    repeated = Run.objects.filter(project_id=run.project_id, code=content["replicate_of"]).first()
    run.latest_number, run.control_kind, run.replicate_of = number, content["control_kind"], repeated
    run.save(update_fields=["latest_number", "control_kind", "replicate_of"])
    return revision
