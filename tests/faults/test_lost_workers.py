"""Killed workers and a flushed broker during a fit: the fit finishes once, with one result."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import pytest

from kinetics_db.demo.invented.loading import ask_for_fits
from kinetics_db.demo.tern import load_tern
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.services import stop_fit
from kinetics_db.jobs.models import Attempt, Job
from kinetics_db.jobs.selectors import attempts_of
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.people import make_user
from tests.flows.test_alpha_pinene import ask, wait_for

pytestmark = pytest.mark.django_db(transaction=True)
QUICK_LEASE = {"RATEWRIGHT_JOB_LEASE_SECONDS": "6", "RATEWRIGHT_JOB_RESEND_AFTER_SECONDS": "1"}


@pytest.fixture(autouse=True)
def quick_lease(monkeypatch: pytest.MonkeyPatch) -> None:
    """The processes of these tests take a silent worker for lost after seconds."""
    for name, value in QUICK_LEASE.items():
        monkeypatch.setenv(name, value)


def wait_until(condition: Callable[[], bool], *, seconds: float, what: str) -> None:
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, f"{what} within {seconds} s"
        time.sleep(0.05)


def job_of(fit: Fit) -> Job:
    return Job.objects.get(kind="fit", subject_id=fit.pk)


def is_under_way(fit: Fit) -> Callable[[], bool]:
    return lambda: job_of(fit).state == Job.State.RUNNING and job_of(fit).progress > 0


def assert_one_result(fit: Fit) -> None:
    assert FitResult.objects.filter(fit=fit).count() == 1
    assert FitResult.objects.get(fit=fit).status == "converged"
    assert chain_breaks() == []


def ask_for_demo_fits() -> list[Fit]:
    user = make_user("demo")
    return ask_for_fits(PLAN, load_tern(user=user, say=lambda _: None), user=user)


def test_a_killed_worker_costs_an_attempt_and_every_fit_of_the_demo_finishes_once(
    celery_worker_process: Callable[..., Any],
    sweeper_process: Callable[..., Any],
) -> None:
    worker = celery_worker_process(concurrency=1)
    sweeper_process(every=0.2)
    fits = ask_for_demo_fits()
    wait_until(is_under_way(fits[0]), seconds=90, what="the first fit is under way")
    worker.kill()
    celery_worker_process(concurrency=1)
    for fit in fits:
        assert wait_for(fit).state == Job.State.DONE, job_of(fit).message
        assert_one_result(fit)
    assert [a.outcome for a in attempts_of(job_of(fits[0]))] == [Attempt.Outcome.LOST, Attempt.Outcome.DONE]


def test_a_killed_child_of_a_worker_is_replaced_and_the_fit_finishes_once(
    celery_worker_process: Callable[..., Any],
    sweeper_process: Callable[..., Any],
) -> None:
    worker = celery_worker_process(concurrency=1)
    sweeper_process(every=0.2)
    fit = ask(starts=MANY_STARTS)
    wait_until(is_under_way(fit), seconds=90, what="the fit is under way")
    assert worker.kill_children()
    job = wait_for(fit)
    assert job.state == Job.State.DONE, job.message
    assert_one_result(fit)


def test_a_flushed_broker_loses_no_fit_of_the_demo(
    broker: Any,
    celery_worker_process: Callable[..., Any],
    sweeper_process: Callable[..., Any],
) -> None:
    import redis

    fits = ask_for_demo_fits()
    with redis.Redis(unix_socket_path=str(broker.socket)) as client:
        assert client.llen("ratewright") == len(fits), "the bells have been rung"
        client.flushall()
    celery_worker_process(concurrency=1)
    sweeper_process(every=0.2)
    for fit in fits:
        assert wait_for(fit).state == Job.State.DONE, job_of(fit).message
        assert_one_result(fit)


def test_a_fit_asked_for_while_the_broker_is_away_starts_when_it_is_back(
    broker: Any,
    celery_worker_process: Callable[..., Any],
    sweeper_process: Callable[..., Any],
) -> None:
    broker.stop()
    fit = ask()
    assert job_of(fit).state == Job.State.WAITING
    broker.start()
    celery_worker_process(concurrency=1)
    sweeper_process(every=0.2)
    job = wait_for(fit)
    assert job.state == Job.State.DONE, job.message
    assert_one_result(fit)


def test_a_running_fit_stops_when_asked_and_keeps_its_best_point(
    celery_worker_process: Callable[..., Any],
) -> None:
    celery_worker_process(concurrency=1)
    fit = ask(starts=MANY_STARTS)
    wait_until(is_under_way(fit), seconds=90, what="the fit is under way")
    stop_fit(user=fit.created_by, fit=fit)
    assert wait_for(fit).state == Job.State.STOPPED
    result = FitResult.objects.get(fit=fit)
    assert result.status == "stopped" and result.cost is not None


MANY_STARTS = 40
"""Enough work for several seconds, so that something can happen to the worker meanwhile."""
