"""Two hosts share one queue, one database and one folder of files, and each does some of the work."""

from __future__ import annotations

import socket
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from django.conf import settings

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.fits.models import FitResult
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.models import Attempt, Job
from kinetics_db.provenance.models import StoredBytes
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.small import make_study
from tests.services.deployment import command_of, health_command_of
from tests.services.hosts import on_host, way_to_part
from tests.services.processes import CHECKOUT, RunningProcess, TestProcesses, wait_until

pytestmark = [pytest.mark.processes, pytest.mark.django_db(transaction=True)]

HOSTS = ("host-a", "host-b")
FITS = 12
READ_ALL = (
    "from kinetics_db.provenance.models import StoredBytes\n"
    "from kinetics_db.provenance.selectors import read_bytes\n"
    "print('read', sum(len(read_bytes(stored)) > 0 for stored in StoredBytes.objects.all()))\n"
)


@pytest.fixture
def environments(tmp_path: Path) -> dict[str, dict[str, str]]:
    """What the two hosts have apart and in common."""
    return {
        host: {
            "RATEWRIGHT_ROLE": "worker",
            "RATEWRIGHT_WORKER_PROCESSES": "1",
            "RATEWRIGHT_VAR": str(tmp_path / host),
            "RATEWRIGHT_BYTES": str(settings.BYTE_STORE_DIR),
            "RATEWRIGHT_JOB_LEASE_SECONDS": "3",
            "REMAP_SIGTERM": "SIGQUIT",
        }
        for host in HOSTS
    }


@pytest.fixture
def workers(
    own_processes: TestProcesses, environments: dict[str, dict[str, str]]
) -> dict[str, RunningProcess]:
    """A worker on each host, started with the very command of docker-compose.yml."""
    return {
        host: own_processes.start_command(
            "worker",
            # Without hosts of their own two workers would have one name.
            [*on_host(host), *command_of("worker"), *([] if way_to_part() else ["--hostname", f"{host}@%h"])],
            environments[host],
            is_ready=lambda written: " ready." in written,
        )
        for host in HOSTS
    }


def run_on(
    host: str, command: list[str], own_processes: TestProcesses, environment: dict[str, str]
) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*on_host(host), *command],
        cwd=CHECKOUT,
        env={**own_processes.environment, **environment},
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )


def ask_for_fits() -> list[int]:
    study = make_study()
    return [
        request_fit(
            user=study.user,
            dataset=study.dataset,
            mechanism_version=study.version,
            constants=[Constant("k", start=0.002 * (1 + i))],
        ).pk
        for i in range(FITS)
    ]


def doer_of(attempt: Attempt, workers: dict[str, RunningProcess], pools: dict[str, list[int]]) -> str:
    """Which worker made an attempt, by the process that its row names."""
    name, _, pid = attempt.worker.rpartition(":")
    (host,) = (host for host in workers if int(pid) in pools[host])
    assert name == (host if way_to_part() else socket.gethostname())
    return host


def network_of(process: RunningProcess) -> str:
    return str(Path(f"/proc/{process.pid}/ns/net").readlink())


def test_two_hosts_do_every_job_of_one_queue_exactly_once(
    workers: dict[str, RunningProcess],
    own_processes: TestProcesses,
    environments: dict[str, dict[str, str]],
) -> None:
    pools = {host: worker.children() for host, worker in workers.items()}
    if way_to_part():
        sys.stdout.write(f"hosts: parted by {' '.join(way_to_part())}\n")
        networks = {network_of(worker) for worker in workers.values()}
        assert len(networks | {str(Path("/proc/self/ns/net").readlink())}) == 3
        answer = run_on(HOSTS[1], health_command_of("worker"), own_processes, environments[HOSTS[1]])
        assert (answer.returncode, answer.stdout) == (0, "celery@host-b answers\n"), answer.stderr
    else:
        sys.stdout.write("hosts: no networks can be parted here; two workers with folders of their own\n")

    fits = ask_for_fits()
    wait_until(
        lambda: not Job.objects.filter(state__in=Job.OPEN).exists(), within=90, what="all fits are done"
    )

    assert set(Job.objects.values_list("subject_id", "state")) == {(fit, Job.State.DONE) for fit in fits}
    assert sorted(FitResult.objects.values_list("fit_id", flat=True)) == sorted(fits)
    attempts = list(Attempt.objects.all())
    assert len(attempts) == FITS, "each job was begun once"
    assert {doer_of(attempt, workers, pools) for attempt in attempts} == set(HOSTS)
    assert chain_breaks() == []

    stored = StoredBytes.objects.count()
    assert stored > 0
    read = run_on(
        HOSTS[1],
        [sys.executable, "manage.py", "shell", "--no-imports", "--command", READ_ALL],
        own_processes,
        environments[HOSTS[1]],
    )
    assert f"read {stored}\n" in read.stdout, read.stderr


def test_the_work_of_a_host_that_is_lost_is_taken_up_by_the_other(
    workers: dict[str, RunningProcess], sweeper_process: Callable[..., RunningProcess]
) -> None:
    sweeper_process(every=0.2, environment={"RATEWRIGHT_JOB_RESEND_AFTER_SECONDS": "1"})
    pool = workers[HOSTS[0]].children()
    fits = ask_for_fits()
    wait_until(
        lambda: any(int(attempt.worker.rpartition(":")[2]) in pool for attempt in Attempt.objects.all()),
        within=30,
        what="the host has begun to work",
    )
    workers[HOSTS[0]].kill()
    wait_until(
        lambda: not Job.objects.filter(state__in=Job.OPEN).exists(),
        within=90,
        what="the other host has done all fits",
    )
    assert sorted(FitResult.objects.values_list("fit_id", flat=True)) == sorted(fits)
    assert chain_breaks() == []
