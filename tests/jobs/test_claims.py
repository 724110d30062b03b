"""One job, one worker at a time, at most three attempts."""

from __future__ import annotations

from datetime import timedelta
from typing import Any

import pytest
from django.db.models.functions import Now

from kinetics_db.errors import Conflict
from kinetics_db.jobs import services as jobs
from kinetics_db.jobs.models import Attempt, Job
from kinetics_db.jobs.selectors import attempts_of
from tests.factories.people import make_user

pytestmark = pytest.mark.django_db


@pytest.fixture
def job() -> Job:
    return jobs.request_job(user=make_user(), kind="fit", subject_id=7)


def lose_lease(job: Job) -> None:
    Job.objects.filter(pk=job.pk).update(lease_until=Now() - timedelta(seconds=1))


def test_the_same_request_has_one_job(job: Job) -> None:
    assert jobs.request_job(user=make_user(), kind="fit", subject_id=7).pk == job.pk


def test_only_the_first_claim_gets_the_job(job: Job) -> None:
    first = jobs.claim_job(job.pk)
    assert first is not None and first.token == 1
    assert jobs.claim_job(job.pk) is None


def test_a_heartbeat_renews_the_lease_and_keeps_progress(job: Job) -> None:
    claim = jobs.claim_job(job.pk)
    assert claim
    lose_lease(job)
    jobs.heartbeat(claim, progress=0.4, message="iteration 3")
    job.refresh_from_db()
    assert (job.progress, job.message) == (0.4, "iteration 3")
    assert jobs.sweep().lost == 0


def test_a_job_whose_lease_ran_out_waits_again(job: Job) -> None:
    jobs.claim_job(job.pk)
    lose_lease(job)
    assert jobs.sweep().lost == 1
    job.refresh_from_db()
    assert job.state == Job.State.WAITING
    assert attempts_of(job)[0].outcome == Attempt.Outcome.LOST


def test_an_older_attempt_can_neither_beat_nor_store(job: Job) -> None:
    old = jobs.claim_job(job.pk)
    assert old
    lose_lease(job)
    jobs.sweep()
    new = jobs.claim_job(job.pk)
    assert new and new.token == 2
    with pytest.raises(jobs.LeaseLost):
        jobs.heartbeat(old, progress=0.9)
    with pytest.raises(jobs.LeaseLost), jobs.finishing(old):
        pytest.fail("an older attempt must not get to store its result")
    with jobs.finishing(new):
        pass
    job.refresh_from_db()
    assert job.state == Job.State.DONE


def test_after_three_lost_attempts_the_job_has_crashed_with_what_is_known(job: Job) -> None:
    for _ in range(3):
        claim = jobs.claim_job(job.pk)
        assert claim
        jobs.heartbeat(claim, progress=0.25, message="iteration 2")
        lose_lease(job)
        jobs.sweep()
    job.refresh_from_db()
    assert job.state == Job.State.CRASHED
    assert "3 attempts" in job.message and "iteration 2" in job.message
    assert jobs.claim_job(job.pk) is None


def test_work_that_breaks_is_given_back_and_at_last_crashed(job: Job) -> None:
    for expected in (Job.State.WAITING, Job.State.WAITING, Job.State.CRASHED):
        claim = jobs.claim_job(job.pk)
        assert claim
        jobs.give_back(claim, reason="MemoryError: too large")
        job.refresh_from_db()
        assert job.state == expected
    assert job.message == "MemoryError: too large"


def test_crashed_work_can_be_tried_again_with_three_fresh_attempts(job: Job) -> None:
    test_after_three_lost_attempts_the_job_has_crashed_with_what_is_known(job)
    jobs.retry_job(job=job)
    claim = jobs.claim_job(job.pk)
    assert claim and claim.token == 4


def test_work_that_is_done_cannot_be_tried_again(job: Job) -> None:
    claim = jobs.claim_job(job.pk)
    assert claim
    with jobs.finishing(claim):
        pass
    with pytest.raises(Conflict, match="done"):
        jobs.retry_job(job=job)


def test_a_stop_reaches_running_work_at_its_next_heartbeat(job: Job) -> None:
    claim = jobs.claim_job(job.pk)
    assert claim
    jobs.request_stop(job=job)
    with pytest.raises(jobs.StopAsked):
        jobs.heartbeat(claim, progress=0.1)


def test_a_stop_ends_waiting_work_at_once(job: Job) -> None:
    assert jobs.request_stop(job=job).state == Job.State.STOPPED
    assert jobs.claim_job(job.pk) is None


def test_a_stop_after_the_end_is_refused(job: Job) -> None:
    jobs.request_stop(job=job)
    with pytest.raises(Conflict, match="already ended"):
        jobs.request_stop(job=job)


def test_a_result_that_cannot_be_stored_leaves_the_job_running(job: Job) -> None:
    claim = jobs.claim_job(job.pk)
    assert claim
    with pytest.raises(ZeroDivisionError), jobs.finishing(claim):
        raise ZeroDivisionError
    job.refresh_from_db()
    assert job.state == Job.State.RUNNING


def test_a_waiting_job_whose_bell_nobody_heard_is_rung_again(
    job: Job, monkeypatch: pytest.MonkeyPatch
) -> None:
    rung: list[int] = []
    monkeypatch.setattr(jobs, "send", lambda name, job_id: rung.append(job_id) or True)
    assert jobs.sweep().rung == 1
    assert jobs.sweep().rung == 0, "the bell was rung a moment ago"
    Job.objects.filter(pk=job.pk).update(ring_after=Now() - timedelta(hours=1))
    assert jobs.sweep().rung == 1
    assert rung == [job.pk, job.pk]


def test_the_pause_between_bells_doubles_so_that_they_do_not_pile_up(
    job: Job, monkeypatch: pytest.MonkeyPatch, settings: Any
) -> None:
    settings.JOB_RESEND_AFTER_SECONDS = 10.0
    monkeypatch.setattr(jobs, "send", lambda name, job_id: True)
    pauses = []
    for _ in range(6):
        Job.objects.filter(pk=job.pk).update(ring_after=None)
        before = Job.objects.annotate(now=Now()).get(pk=job.pk).now
        jobs.sweep()
        job.refresh_from_db()
        assert job.ring_after is not None
        pauses.append(round((job.ring_after - before).total_seconds(), -1))
    assert pauses == [10, 20, 40, 80, 80, 80]


def test_an_error_text_that_no_database_takes_is_kept_as_far_as_it_can_be(job: Job) -> None:
    claim = jobs.claim_job(job.pk)
    assert claim
    jobs.give_back(claim, reason="bad \x00 byte, half \ud800 character " + "x" * 1000)
    job.refresh_from_db()
    assert job.state == Job.State.WAITING
    assert job.message.startswith("bad   byte, half ? character")
