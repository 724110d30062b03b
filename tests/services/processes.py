"""Real worker, sweeper and web processes against the database of the running test."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

from kinetics_db.config.processes.guard import is_running
from kinetics_db.config.processes.local import ONE_THREAD_PER_PROCESS, is_healthy, says
from kinetics_db.config.processes.supervisor import Child, Supervisor

CHECKOUT = Path(__file__).resolve().parents[2]


class RunningProcess:
    """One started process: its pid, its log, and ways to end it."""

    def __init__(self, supervisor: Supervisor, child: Child):
        self.name = child.name
        self.log_file = supervisor.log(child.name)
        self._supervisor = supervisor
        self.pid = supervisor.start(child)
        self._ended = False

    def log(self) -> str:
        """Everything it has written so far."""
        return self.log_file.read_text(errors="replace")

    def is_running(self) -> bool:
        return not self._ended and is_running(self.pid)

    def children(self) -> list[int]:
        """Process ids of its own children, such as the pool of a worker."""
        return children_of(self.pid)

    def kill(self) -> None:
        """kill -9 of the process and its whole group."""
        self._end(kill=True)

    def kill_children(self) -> list[int]:
        """kill -9 of its present children only, itself goes on; answers their process ids."""
        pids = self.children()
        for pid in pids:
            os.kill(pid, signal.SIGKILL)
        return pids

    def stop(self) -> None:
        """Stop it as the installation does: its stop signal, then SIGKILL after the grace."""
        self._end(kill=False)

    def _end(self, *, kill: bool) -> None:
        if not self._ended:
            self._supervisor.stop_child(self.name, kill=kill)
            self._ended = True


class TestProcesses:
    """Starts processes of this project; whatever still runs at the end of the test is stopped.

    Parameters
    ----------
    folder : Path
        For logs.
    environment : mapping
        What the children get besides the environment of the suite: at least the database and the broker.
    """

    __test__ = False

    def __init__(self, folder: Path, environment: Mapping[str, str]):
        self.environment = {
            **os.environ,
            **dict.fromkeys(ONE_THREAD_PER_PROCESS, "1"),
            "PYTHONUNBUFFERED": "1",
            "PYTHONPATH": str(CHECKOUT),
            **environment,
        }
        # A process of the suite is no pytest worker.
        for name in [name for name in self.environment if name.startswith(("PYTEST_", "COV_"))]:
            del self.environment[name]
        self._supervisor = Supervisor(folder)
        self._numbers: dict[str, int] = {}

    def start_worker(
        self, *, concurrency: int = 1, environment: Mapping[str, str] | None = None
    ) -> RunningProcess:
        """A Celery worker with its pool of processes, ready for messages when this returns."""
        name = self._name("worker")
        log = self._supervisor.log(name)
        command = [sys.executable, "-m", "celery", "-A", "workers.celery_app:app", "worker"]
        command += ["--pool", "prefork", "--concurrency", str(concurrency), "--loglevel", "INFO"]
        command += ["--without-gossip", "--without-mingle", "--hostname", f"{name}-{os.getpid()}@%h"]
        remapped = {"REMAP_SIGTERM": "SIGQUIT", "RATEWRIGHT_ROLE": "worker"}
        return self._start(
            name, command, {**remapped, **(environment or {})}, is_ready=lambda: says(log, " ready.")
        )

    def start_sweeper(
        self, *, every: float = 0.5, environment: Mapping[str, str] | None = None
    ) -> RunningProcess:
        """The sweeper, looking every so many seconds."""
        command = [sys.executable, "manage.py", "sweep", "--every", str(every)]
        return self._start(self._name("sweeper"), command, environment or {})

    def start_web_server(
        self, *, port: int | None = None, environment: Mapping[str, str] | None = None
    ) -> tuple[RunningProcess, str]:
        """The web server on a free port; answers it and its address, without a slash at the end."""
        port = port or free_port()
        command = [sys.executable, "-m", "gunicorn", "kinetics_db.config.wsgi:application"]
        command += ["--bind", f"127.0.0.1:{port}", "--worker-class", "gthread", "--threads", "4"]
        command += ["--graceful-timeout", "2", "--no-control-socket"]
        process = self._start(
            self._name("web"),
            command,
            {"RATEWRIGHT_ROLE": "web", **(environment or {})},
            is_ready=lambda: is_healthy(port),
        )
        return process, f"http://127.0.0.1:{port}"

    def start_command(
        self,
        kind: str,
        command: Sequence[str],
        environment: Mapping[str, str],
        *,
        is_ready: Callable[[str], bool],
    ) -> RunningProcess:
        """Any other command; ``is_ready`` is asked with what it has written so far."""
        name = self._name(kind)
        log = self._supervisor.log(name)
        return self._start(
            name,
            list(command),
            environment,
            is_ready=lambda: log.exists() and is_ready(log.read_text(errors="replace")),
        )

    def stop_all(self) -> None:
        self._supervisor.stop()

    def _name(self, kind: str) -> str:
        self._numbers[kind] = self._numbers.get(kind, 0) + 1
        return f"{kind}-{self._numbers[kind]}"

    def _start(
        self,
        name: str,
        command: list[str],
        environment: Mapping[str, str],
        is_ready: Callable[[], bool] | None = None,
    ) -> RunningProcess:
        child = Child(
            name=name,
            command=command,
            environment={**self.environment, **environment},
            folder=CHECKOUT,
            is_ready=is_ready,
            ready_timeout=120.0,
            grace=10.0,
        )
        return RunningProcess(self._supervisor, child)


def wait_until(condition: Callable[[], object], *, within: float, what: str) -> None:
    """Wait for a condition; fails the test, saying what did not happen, after ``within`` seconds."""
    deadline = time.monotonic() + within
    while not condition():
        if time.monotonic() > deadline:
            raise AssertionError(f"not within {within:g} s: {what}")
        time.sleep(0.05)


def free_port() -> int:
    """A port of 127.0.0.1 on which nobody listens at the moment."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def children_of(pid: int) -> list[int]:
    """Process ids of the running children of a process."""
    table = subprocess.run(["ps", "-A", "-o", "pid=,ppid=,stat="], capture_output=True, text=True, check=True)
    rows = [line.split() for line in table.stdout.splitlines()]
    return [int(row[0]) for row in rows if int(row[1]) == pid and not row[2].startswith("Z")]
