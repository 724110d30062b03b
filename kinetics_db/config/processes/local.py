"""The installation on one machine: its processes composed, from the first migration to the last stop.

``make serve`` and ``make demo`` are this and little more.
"""

from __future__ import annotations

import http.client
import os
import shutil
import socket
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from .failures import ChildDied, PortBusy
from .supervisor import Child, Supervised, Supervisor
from .valkey import broker_url, socket_path, valkey_child

HOST = "127.0.0.1"
DEFAULT_PORT = 8765

ONE_THREAD_PER_PROCESS = (
    "OPENBLAS_NUM_THREADS",
    "OMP_NUM_THREADS",
    "MKL_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
    "NUMEXPR_NUM_THREADS",
)
"""Small matrices: threads inside the linear algebra cost more than they bring."""


def _say_nothing(message: str) -> None:
    return


class LocalInstallation(Supervised):
    """Database, queue, worker, sweeper and web server of one machine, all below one folder.

    Parameters
    ----------
    checkout : Path
        The folder with ``manage.py``.
    var : Path
        Everything that is kept: database, files, queue, logs. Made if missing.
    port : int
        Where the web server listens on 127.0.0.1.
    concurrency : int, optional
        Number of worker processes; by default one per core, at most 8.
    start_again : str
        The command that starts it anew, for the message about a child that died.
    say : callable
        Told in a line what is being done.
    """

    def __init__(
        self,
        *,
        checkout: Path,
        var: Path,
        port: int = DEFAULT_PORT,
        concurrency: int | None = None,
        start_again: str = "",
        say: Callable[[str], None] = _say_nothing,
    ):
        self.checkout = checkout.resolve()
        self.var = var.resolve()
        self.port = port
        self.concurrency = concurrency or min(8, os.cpu_count() or 1)
        self.start_again = start_again
        self._say = say

    @property
    def url(self) -> str:
        return f"http://{HOST}:{self.port}/"

    @property
    def first_account_file(self) -> Path:
        """Where the name and password of the first account are kept."""
        return self.var / "first_account.txt"

    @property
    def environment(self) -> dict[str, str]:
        """What every child gets; a process that wants to act on this installation needs the same."""
        return {
            **os.environ,
            **dict.fromkeys(ONE_THREAD_PER_PROCESS, "1"),
            "DJANGO_SETTINGS_MODULE": "kinetics_db.config.settings.local",
            "RATEWRIGHT_VAR": str(self.var),
            "RATEWRIGHT_BROKER_URL": broker_url(self.var / "valkey"),
            "PYTHONPATH": os.pathsep.join(filter(None, [str(self.checkout), os.environ.get("PYTHONPATH")])),
            "PYTHONUNBUFFERED": "1",
        }

    def start(self) -> None:
        """Bring everything up; when this returns the web server answers.

        On any failure, or Ctrl-C, what was started is stopped again.

        Raises
        ------
        AlreadyRunning
            When another supervisor holds the folder.
        PortBusy
            When something else listens on the port.
        ServerMissing
            When there is no Valkey or Redis server.
        ChildFailed
            When a child ends, or does not answer in time.
        """
        self.var.mkdir(mode=0o700, parents=True, exist_ok=True)
        lock = self.var / "supervisor.lock"
        if not lock.exists():
            self.var.chmod(0o700)  # the first start: whoever made the folder, the data are this user's only
        again = f". Start again: {self.start_again}" if self.start_again else ""
        self._supervisor = Supervisor(
            self.var / "log",
            lock=lock,
            address=self.url,
            consequence=f"; everything else has been stopped{again}",
        )
        try:
            self._bring_up(self._supervisor)
        except BaseException:
            self.stop()
            raise

    def check(self) -> None:
        """If any child has ended, stop the others and raise ChildDied with its last words."""
        with self._all_or_none():
            self._running().check()

    def wait(self) -> None:
        """Watch the children until Ctrl-C (KeyboardInterrupt) or the death of one.

        Raises
        ------
        ChildDied
            When a child has ended; the others have been stopped then.
        """
        with self._all_or_none():
            self._running().wait()

    def pid(self, name: str) -> int:
        """Process id of 'web', 'worker', 'sweeper' or 'valkey'."""
        return self._running().pid(name)

    def stop(self) -> None:
        """Stop everything in order: web, worker, sweeper, and the queue last. May be called twice."""
        if self.is_running:
            self._end()
            shutil.rmtree(socket_path(self.var / "valkey").parent, ignore_errors=True)

    def _bring_up(self, supervisor: Supervisor) -> None:
        refuse_busy_port(self.port)
        self._say("Bringing the database up to date ...")
        supervisor.run(self._child("migrate", *self._manage("migrate", "--no-input")), timeout=300)
        self._say("Starting the queue ...")
        supervisor.guard.remove_when_orphaned(socket_path(self.var / "valkey").parent)
        supervisor.start(valkey_child(self.var / "valkey"))
        self._say("Starting the sweeper, the worker and the web server ...")
        refuse_busy_port(self.port)  # somebody may have been faster meanwhile
        try:
            # Named in the reverse of the order in which they have to stop.
            supervisor.start_together(
                self._child("sweeper", *self._manage("sweep")),
                self.worker_child(supervisor.log("worker")),
                self.web_child(supervisor.log("web")),
            )
        except ChildDied as death:
            if death.name == "web":
                refuse_busy_port(self.port)  # what the web server died of, in fewer words
            raise

    @contextmanager
    def _all_or_none(self) -> Iterator[None]:
        """Within this block the death of one child ends the others, before anybody is told."""
        try:
            yield
        except ChildDied:
            self.stop()
            raise

    def worker_child(self, log: Path) -> Child:
        command = [sys.executable, "-m", "celery", "-A", "workers.celery_app:app", "worker"]
        command += ["--pool", "prefork", "--concurrency", str(self.concurrency), "--loglevel", "INFO"]
        command += ["--without-gossip", "--without-mingle", "--hostname", "local@%h"]
        return Child(
            name="worker",
            command=command,
            # A soft stop: what runs is given up after some seconds and taken up at the next start.
            environment={**self.environment, "REMAP_SIGTERM": "SIGQUIT", "RATEWRIGHT_ROLE": "worker"},
            folder=self.checkout,
            is_ready=lambda: says(log, " ready."),
            ready_timeout=120.0,
            grace=15.0,
        )

    def web_child(self, log: Path) -> Child:
        command = [sys.executable, "-m", "gunicorn", "kinetics_db.config.wsgi:application"]
        command += ["--bind", f"{HOST}:{self.port}", "--worker-class", "gthread", "--workers", "1"]
        command += ["--threads", "8", "--graceful-timeout", "5", "--no-control-socket"]
        command += ["--log-level", "info"]  # which says when it listens
        return self._child(
            "web",
            *command,
            # On a port that it could not get, somebody else's web server may answer.
            is_ready=lambda: says(log, "Listening at: ") and is_healthy(self.port),
            ready_timeout=120.0,
            role="web",
            called="The web server",
        )

    def _manage(self, *arguments: str) -> list[str]:
        return [sys.executable, "manage.py", *arguments]

    def _child(
        self,
        name: str,
        *command: str,
        is_ready: Callable[[], bool] | None = None,
        ready_timeout: float = 30.0,
        role: str = "worker",
        called: str = "",
    ) -> Child:
        return Child(
            name=name,
            command=command,
            environment={**self.environment, "RATEWRIGHT_ROLE": role},
            folder=self.checkout,
            is_ready=is_ready,
            ready_timeout=ready_timeout,
            called=called,
        )


def keep_secret(path: Path, text: str) -> None:
    """Write a file that only this user can read, whole or not at all."""
    fresh = path.with_name(path.name + ".new")
    fresh.unlink(missing_ok=True)
    descriptor = os.open(fresh, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    with os.fdopen(descriptor, "w") as file:
        file.write(text)
    fresh.replace(path)


def says(log: Path, words: str) -> bool:
    """Whether a log holds these words by now."""
    try:
        return words in log.read_text(errors="replace")
    except OSError:
        return False


def is_healthy(port: int, *, path: str = "/api/v1/health/", timeout: float = 2.0) -> bool:
    """Whether the web server on this port answers its health address with 200."""
    connection = http.client.HTTPConnection(HOST, port, timeout=timeout)
    try:
        connection.request("GET", path)
        return connection.getresponse().status == 200
    except (OSError, http.client.HTTPException):
        return False
    finally:
        connection.close()


def refuse_busy_port(port: int) -> None:
    """Raise PortBusy if another program listens on this port of 127.0.0.1."""
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind((HOST, port))
        except OSError as error:
            raise PortBusy(
                f"Port {port} is taken by another program; choose another one, for instance PORT={port + 1}."
            ) from error
