"""Claiming, keeping and finishing background work.

Times are the database's (`Now()`), so that hosts whose clocks differ agree on whose lease has run out.
"""

from __future__ import annotations

import logging
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import timedelta

from django.conf import settings
from django.db import transaction
from django.db.models import F, QuerySet
from django.db.models.functions import Now

from kinetics_db.accounts.models import User
from kinetics_db.errors import Conflict, RatewrightError
from kinetics_db.jobs import selectors
from kinetics_db.jobs.models import Attempt, Job
from kinetics_db.task_queue import RUN_JOB, enqueue_on_commit, send

log = logging.getLogger(__name__)


class LeaseLost(RatewrightError):
    """Another worker owns the job now; whatever this one computed must not be written."""


class StopAsked(RatewrightError):
    """The person who asked for the work wants it stopped."""


@dataclass(frozen=True)
class Claim:
    """The right to work on a job: `token` is the attempt's number and fences out older attempts."""

    job_id: int
    kind: str
    subject_id: int
    token: int


def request_job(*, user: User, kind: str, subject_id: int) -> Job:
    """The job of a request, made (and its bell rung on commit) if there is none yet."""
    job, made = Job.objects.get_or_create(
        kind=kind,
        subject_id=subject_id,
        defaults={"requested_by": user, "attempts_allowed": settings.JOB_MAX_ATTEMPTS},
    )
    if made:
        _ring(job.pk)
    return job


def _ring(job_id: int) -> None:
    enqueue_on_commit(RUN_JOB, job_id, after_sent=lambda: _rung(job_id))


def _rung(job_id: int) -> None:
    """Note that a message was sent; the next one follows after a pause that doubles, eightfold at most.

    A message that still lies in the queue behind long work is no reason to pile up more of them.
    """
    for rings in Job.objects.filter(pk=job_id).values_list("rings", flat=True):
        pause = settings.JOB_RESEND_AFTER_SECONDS * 2 ** min(rings, 3)
        Job.objects.filter(pk=job_id).update(
            rings=min(rings + 1, 1000), ring_after=Now() + timedelta(seconds=pause)
        )


def storable(text: str) -> str:
    """Words of an error as every database takes them: no NUL, no half characters, no more than 500."""
    return text.replace("\x00", " ").encode(errors="replace").decode()[:500]


def worker_name() -> str:
    """Host and process, for the record of attempts."""
    return f"{socket.gethostname()}:{os.getpid()}"


def claim_job(job_id: int) -> Claim | None:
    """Claim a waiting job, or None when it is not (or no longer) there to be claimed."""
    with transaction.atomic():
        claimed = Job.objects.filter(
            pk=job_id, state=Job.State.WAITING, attempts__lt=F("attempts_allowed")
        ).update(
            state=Job.State.RUNNING,
            attempts=F("attempts") + 1,
            lease_until=Now() + timedelta(seconds=settings.JOB_LEASE_SECONDS),
        )
        if not claimed:
            return None
        job = Job.objects.get(pk=job_id)
        Attempt.objects.create(
            job=job, number=job.attempts, worker=worker_name(), started=Now(), heartbeat=Now()
        )
    return Claim(job.pk, job.kind, job.subject_id, job.attempts)


def heartbeat(claim: Claim, *, progress: float, message: str = "", heed_stop: bool = True) -> None:
    """Renew the lease and tell how far the work is.

    To be called when the work has moved, not from a timer, so that work which hangs loses its lease.
    Raises LeaseLost when another attempt owns the job, StopAsked when somebody asked to stop (unless the work
    is past stopping).
    """
    kept = _held(claim).update(
        lease_until=Now() + timedelta(seconds=settings.JOB_LEASE_SECONDS),
        progress=min(max(progress, 0.0), 1.0),
        message=storable(message),
    )
    if not kept:
        raise LeaseLost(f"attempt {claim.token} no longer owns job {claim.job_id}")
    Attempt.objects.filter(job_id=claim.job_id, number=claim.token).update(heartbeat=Now())
    if heed_stop and Job.objects.filter(pk=claim.job_id, stop_requested=True).exists():
        raise StopAsked(f"job {claim.job_id} was asked to stop")


@contextmanager
def finishing(claim: Claim, *, state: str = Job.State.DONE, message: str = "") -> Iterator[None]:
    """A transaction in which the result is stored and the job ends, if this attempt still owns it.

    The token is checked first and under the row's lock, so that two attempts can never both store.
    """
    with transaction.atomic():
        ended = _held(claim).update(
            state=state,
            finished=Now(),
            lease_until=None,
            progress=1.0 if state == Job.State.DONE else F("progress"),
            message=storable(message),
        )
        if not ended:
            raise LeaseLost(f"attempt {claim.token} no longer owns job {claim.job_id}")
        Attempt.objects.filter(job_id=claim.job_id, number=claim.token).update(
            ended=Now(), outcome=state, detail=storable(message)
        )
        yield


def _held(claim: Claim) -> QuerySet[Job]:
    return Job.objects.filter(pk=claim.job_id, state=Job.State.RUNNING, attempts=claim.token)


def fail_job(claim: Claim, *, reason: str) -> None:
    """End a job whose work says that it cannot be done; the reason is shown to whoever asked."""
    with finishing(claim, state=Job.State.FAILED, message=reason):
        pass


def give_back(claim: Claim, *, reason: str) -> None:
    """End an attempt that broke unexpectedly: the job waits for another try, or has crashed after the last."""
    reason = storable(reason)
    with transaction.atomic():
        job = Job.objects.get(pk=claim.job_id)
        if job.attempts >= job.attempts_allowed:
            ended = _held(claim).update(
                state=Job.State.CRASHED, lease_until=None, finished=Now(), message=reason
            )
        else:
            ended = _held(claim).update(
                state=Job.State.WAITING, lease_until=None, rings=0, ring_after=None, message=reason
            )
            if ended:
                _ring(claim.job_id)
        if ended:
            Attempt.objects.filter(job_id=claim.job_id, number=claim.token).update(
                ended=Now(), outcome=Attempt.Outcome.FAILED, detail=reason
            )


def request_stop(*, job: Job) -> Job:
    """Ask running work to stop at its next step; work that has not begun ends at once."""
    with transaction.atomic():
        stopped = Job.objects.filter(pk=job.pk, state=Job.State.WAITING).update(
            state=Job.State.STOPPED, stop_requested=True, finished=Now(), message="stopped before it began"
        )
        if not stopped and not Job.objects.filter(pk=job.pk, state=Job.State.RUNNING).update(
            stop_requested=True
        ):
            job.refresh_from_db()
            raise Conflict(f"the work has already ended: {job.state}")
    job.refresh_from_db()
    return job


def retry_job(*, job: Job) -> Job:
    """Put stopped, failed or crashed work back in the queue with three fresh attempts allowed."""
    with transaction.atomic():
        again = Job.objects.filter(
            pk=job.pk, state__in=[Job.State.STOPPED, Job.State.FAILED, Job.State.CRASHED]
        ).update(
            state=Job.State.WAITING,
            stop_requested=False,
            finished=None,
            progress=0.0,
            message="",
            rings=0,
            ring_after=None,
            attempts_allowed=F("attempts") + settings.JOB_MAX_ATTEMPTS,
        )
        if not again:
            job.refresh_from_db()
            raise Conflict(
                f"only work that stopped, failed or crashed can be tried again; this is {job.state}"
            )
        _ring(job.pk)
    job.refresh_from_db()
    return job


@dataclass(frozen=True)
class Swept:
    """What one sweep did."""

    lost: int = 0
    crashed: int = 0
    rung: int = 0


def sweep() -> Swept:
    """Take jobs back from workers that fell silent, give up after the last attempt, ring unheard bells."""
    lost = crashed = rung = 0
    for job in selectors.overdue():
        with transaction.atomic():
            final = job.attempts >= job.attempts_allowed
            # The same condition again inside the UPDATE: the worker may have renewed its lease meanwhile.
            taken = selectors.overdue().filter(pk=job.pk, attempts=job.attempts)
            if final:
                told = f"gave no sign of life in {job.attempts} attempts; last at {job.progress:.0%}: {job.message}"
                count = taken.update(
                    state=Job.State.CRASHED, lease_until=None, finished=Now(), message=told.strip()[:500]
                )
                crashed += count
            elif job.stop_requested:
                count = taken.update(
                    state=Job.State.STOPPED,
                    lease_until=None,
                    finished=Now(),
                    message="stopped; its worker was lost",
                )
            else:
                count = taken.update(state=Job.State.WAITING, lease_until=None, rings=0, ring_after=None)
            if count:
                lost += 1
                Attempt.objects.filter(job=job, number=job.attempts).update(
                    ended=Now(), outcome=Attempt.Outcome.LOST, detail="its lease ran out"
                )
    for job_id in selectors.unheard().values_list("pk", flat=True)[:500]:
        if not send(RUN_JOB, job_id):
            break  # the broker is away; the next sweep tries again
        _rung(job_id)
        rung += 1
    return Swept(lost, crashed, rung)
