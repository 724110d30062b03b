"""Reads about background work."""

from __future__ import annotations

from collections.abc import Sequence

from django.db.models import OuterRef, Q, QuerySet
from django.db.models.functions import Now

from kinetics_db.errors import NotFound
from kinetics_db.jobs.models import Attempt, Job


def job_for(*, kind: str, subject_id: int) -> Job:
    """The job of a request; NotFound when none was asked for."""
    job = Job.objects.filter(kind=kind, subject_id=subject_id).first()
    if job is None:
        raise NotFound(f"no background work was asked for {kind} {subject_id}")
    return job


def jobs_for(*, kind: str, subject_ids: Sequence[int]) -> dict[int, Job]:
    """Jobs of several requests by request id, in one query."""
    return {job.subject_id: job for job in Job.objects.filter(kind=kind, subject_id__in=subject_ids)}


def job_of_each(*, kind: str, subject: str) -> QuerySet[Job]:
    """The job of each row of another query whose field ``subject`` is the request's id, for a subquery."""
    return Job.objects.filter(kind=kind, subject_id=OuterRef(subject)).order_by()


def open_subjects(*, kind: str) -> QuerySet[Job, int]:
    """Ids of the requests of that kind whose work is waiting or running, to stand inside another query."""
    return Job.objects.filter(kind=kind, state__in=Job.OPEN).values_list("subject_id", flat=True)


def attempts_of(job: Job) -> list[Attempt]:
    """Attempts at a job in order."""
    return list(job.attempt_set.order_by("number"))


def open_count() -> int:
    """How many jobs are waiting or running."""
    return Job.objects.filter(state__in=Job.OPEN).count()


def overdue() -> QuerySet[Job]:
    """Running jobs whose lease ran out, by the database's clock."""
    return Job.objects.filter(state=Job.State.RUNNING, lease_until__lt=Now())


def unheard() -> QuerySet[Job]:
    """Waiting jobs whose bell is to be rung again, those that wait longest first."""
    due = Q(ring_after__isnull=True) | Q(ring_after__lt=Now())
    return Job.objects.filter(state=Job.State.WAITING).filter(due).order_by("pk")
