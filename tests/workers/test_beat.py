"""Celery's beat, as docker-compose.yml starts it, in place of `manage.py sweep`."""

from __future__ import annotations

import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import pytest
import redis
from django.db.models.functions import Now

from kinetics_db.config.celery import configure
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.fits.models import FitResult
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.models import Attempt, Job
from kinetics_db.jobs.selectors import attempts_of
from kinetics_db.jobs.services import claim_job
from kinetics_db.task_queue import RUN_JOB, SWEEP_JOBS
from tests.factories.small import make_study
from tests.services.deployment import command_of, health_command_of
from tests.services.processes import CHECKOUT, RunningProcess, TestProcesses, wait_until
from workers.schedule import ROUTES, SWEEPS, schedule

if TYPE_CHECKING:
    from kinetics_db.config.processes.valkey import Valkey


@pytest.fixture
def environment(tmp_path: Path) -> dict[str, str]:
    return {
        "RATEWRIGHT_ROLE": "worker",
        "RATEWRIGHT_JOB_SWEEP_SECONDS": "0.3",
        "RATEWRIGHT_VAR": str(tmp_path / "beat"),
    }


@pytest.fixture
def start_beat(own_processes: TestProcesses, environment: dict[str, str]) -> Callable[[], RunningProcess]:
    def start() -> RunningProcess:
        return own_processes.start_command(
            "beat", command_of("beat"), environment, is_ready=lambda written: " ready." in written
        )

    return start


def waiting_in(broker: Valkey, queue: str) -> int:
    with redis.Redis(unix_socket_path=str(broker.socket)) as client:
        return int(client.llen(queue))


@pytest.mark.processes
@pytest.mark.django_db(transaction=True)
def test_a_job_whose_worker_was_lost_comes_back_through_beat_alone(
    celery_worker_process: Callable[..., RunningProcess], start_beat: Callable[[], RunningProcess]
) -> None:
    study = make_study()
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=study.version,
        constants=[Constant("k", start=0.002)],
    )
    job = Job.objects.get(kind="fit", subject_id=fit.pk)
    assert claim_job(job.pk), "a worker takes it and is never heard of again"
    Job.objects.filter(pk=job.pk).update(lease_until=Now())

    celery_worker_process(concurrency=1)  # hears the first bell, and finds the job taken
    assert Job.objects.get(pk=job.pk).state == Job.State.RUNNING
    start_beat()
    wait_until(lambda: Job.objects.get(pk=job.pk).state == Job.State.DONE, within=60, what="the fit is done")
    assert [a.outcome for a in attempts_of(job)] == [Attempt.Outcome.LOST, Attempt.Outcome.DONE]
    assert FitResult.objects.filter(fit=fit).count() == 1


@pytest.mark.processes
def test_bells_that_piled_up_unheard_are_thrown_away_and_sweeping_goes_on_after_the_queue_was_away(
    broker: Valkey,
    own_processes: TestProcesses,
    start_beat: Callable[[], RunningProcess],
    environment: dict[str, str],
) -> None:
    for _ in range(40):
        configure().signature(SWEEP_JOBS).apply_async(queue=SWEEPS, expires=0.5, ignore_result=True)
    assert waiting_in(broker, SWEEPS) == 40
    beat = start_beat()
    swept = Path(environment["RATEWRIGHT_VAR"]) / "swept"
    wait_until(swept.exists, within=20, what=f"the first sweep is noted; the log:\n{beat.log()}")
    assert beat.log().count("Discarding revoked task") == 40
    assert waiting_in(broker, SWEEPS) <= 1

    broker.stop()
    broker.start()
    at = swept.stat().st_mtime_ns
    wait_until(lambda: swept.stat().st_mtime_ns > at, within=30, what="it sweeps again after that")
    well = subprocess.run(
        health_command_of("beat"),
        cwd=CHECKOUT,
        env={**own_processes.environment, **environment},
        capture_output=True,
        text=True,
        check=False,
        timeout=30,
    )
    assert well.returncode == 0 and well.stdout.startswith("the last sweep was "), well.stderr
    beat.stop()
    assert not beat.is_running()


def test_the_bell_for_a_sweep_has_a_queue_of_its_own_to_which_a_worker_for_fits_does_not_listen() -> None:
    from workers.celery_app import app

    assert {SWEEP_JOBS: {"queue": SWEEPS}} == ROUTES
    assert app.conf.task_routes == ROUTES
    assert app.amqp.router.route({}, RUN_JOB)["queue"].name == "ratewright"
    assert set(app.amqp.queues.consume_from) == {"ratewright"}
    beat = command_of("beat")
    assert beat[beat.index("--queues") + 1] == SWEEPS


@pytest.mark.parametrize(("every", "expires"), [(2.0, 10.0), (0.3, 10.0), (60.0, 300.0)])
def test_a_bell_expires_after_a_few_more_were_due(every: float, expires: float) -> None:
    (entry,) = schedule(every=every).values()
    assert (entry["task"], entry["schedule"]) == (SWEEP_JOBS, every)
    assert entry["options"]["expires"] == expires


def test_the_schedule_rings_as_often_as_the_settings_say() -> None:
    from django.conf import settings

    from workers.celery_app import app

    assert app.conf.beat_schedule == schedule(every=settings.JOB_SWEEP_SECONDS)
    assert app.conf.beat_scheduler == "celery.beat:Scheduler", "which keeps no file"
