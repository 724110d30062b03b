"""The installation on one machine: started, watched and stopped for real."""

from __future__ import annotations

import http.client
import os
import re
import signal
import socket
import stat
import subprocess
import sys
import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import pytest

from kinetics_db.accounts.services import set_password
from kinetics_db.config.processes.failures import AlreadyRunning, ChildDied, PortBusy
from kinetics_db.config.processes.guard import group_is_running, is_running
from kinetics_db.config.processes.local import (
    LocalInstallation,
    is_healthy,
    keep_secret,
    refuse_busy_port,
    says,
)
from kinetics_db.config.processes.supervisor import Child
from kinetics_db.config.processes.valkey import answers, socket_path
from kinetics_db.web.management.commands.serve import account_line
from tests.processes.stand_ins import CHECKOUT
from tests.services.processes import children_of, free_port, wait_until

CHILDREN = ("web", "worker", "sweeper", "valkey")


@pytest.fixture
def installation(tmp_path: Path) -> Iterator[LocalInstallation]:
    local = LocalInstallation(checkout=CHECKOUT, var=tmp_path / "var", port=free_port(), concurrency=1)
    yield local
    local.stop()


def test_children_get_the_folder_the_queue_and_one_thread_each(installation: LocalInstallation) -> None:
    environment = installation.environment
    assert environment["RATEWRIGHT_VAR"] == str(installation.var)
    assert environment["RATEWRIGHT_BROKER_URL"].startswith("redis+socket:///")
    assert environment["DJANGO_SETTINGS_MODULE"] == "kinetics_db.config.settings.local"
    assert environment["OPENBLAS_NUM_THREADS"] == "1"


def test_a_busy_port_is_refused_before_anything_starts(tmp_path: Path) -> None:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        listener.listen()
        port = listener.getsockname()[1]
        installation = LocalInstallation(checkout=CHECKOUT, var=tmp_path, port=port)
        with pytest.raises(PortBusy, match=f"Port {port} is taken by another program; choose another one"):
            installation.start()
    assert list((tmp_path / "log").iterdir()) == []
    refuse_busy_port(port)


def test_a_secret_is_for_this_user_alone_also_where_an_open_file_was(tmp_path: Path) -> None:
    path = tmp_path / "password"
    path.write_text("old")
    path.chmod(0o644)
    keep_secret(path, "new")
    assert path.read_text() == "new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    assert list(tmp_path.iterdir()) == [path]


def test_a_log_says_what_it_says(tmp_path: Path) -> None:
    log = tmp_path / "worker.log"
    assert not says(log, "ready")
    log.write_bytes(b"\xff worker ready.\n")
    assert says(log, "ready.")


def test_a_port_where_nobody_or_a_stranger_listens_is_not_healthy() -> None:
    assert not is_healthy(free_port())
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        listener.listen()
        assert not is_healthy(listener.getsockname()[1], timeout=0.2)


def test_a_port_that_is_taken_while_the_database_is_made_ready_is_refused_before_the_web_server_starts(
    tmp_path: Path,
) -> None:
    with socket.socket() as listener:
        port = free_port()

        def take_the_port(stage: str) -> None:
            if stage.startswith("Starting the sweeper"):
                listener.bind(("127.0.0.1", port))
                listener.listen()

        installation = LocalInstallation(
            checkout=CHECKOUT, var=tmp_path / "var", port=port, say=take_the_port
        )
        with pytest.raises(PortBusy, match=f"Port {port} is taken"):
            installation.start()
    assert not (tmp_path / "var" / "log" / "web.log").exists()


class AnswersEverything(BaseHTTPRequestHandler):
    """A web server of somebody else, healthy at every address."""

    def do_GET(self) -> None:
        self.send_response(200)
        self.end_headers()

    def log_message(self, *_: object) -> None:
        return


class Overtaken(LocalInstallation):
    """Somebody else's web server takes the port in the last moment."""

    def web_child(self, log: Path) -> Child:
        self.stranger = ThreadingHTTPServer(("127.0.0.1", self.port), AnswersEverything)
        threading.Thread(target=self.stranger.serve_forever).start()
        return super().web_child(log)


@pytest.mark.processes
def test_the_answer_of_another_web_server_on_the_port_is_not_taken_for_its_own(tmp_path: Path) -> None:
    installation = Overtaken(checkout=CHECKOUT, var=tmp_path / "var", port=free_port(), concurrency=1)
    try:
        with pytest.raises(PortBusy, match=f"Port {installation.port} is taken"):
            installation.start()
        assert is_healthy(installation.port)
        assert not installation.is_running
    finally:
        installation.stranger.shutdown()
        installation.stranger.server_close()


@pytest.mark.processes
def test_it_comes_up_is_watched_and_goes_down_without_a_trace(installation: LocalInstallation) -> None:
    installation.start()
    pids = {name: installation.pid(name) for name in CHILDREN}
    pool = children_of(pids["worker"])
    assert pool
    assert answers(socket_path(installation.var / "valkey"))
    assert is_healthy(installation.port)
    installation.check()
    with pytest.raises(AlreadyRunning, match=f"process {os.getpid()}"):
        LocalInstallation(checkout=CHECKOUT, var=installation.var, port=free_port()).start()

    os.kill(pids["worker"], signal.SIGKILL)
    with pytest.raises(
        ChildDied, match=r"^The worker was killed by SIGKILL; everything else has been stopped\. L"
    ):
        installation.wait()
    assert not any(group_is_running(pid) for pid in pids.values())
    assert not any(is_running(pid) for pid in pool)
    assert not is_healthy(installation.port)
    assert not socket_path(installation.var / "valkey").parent.exists()


class Serve:
    """`manage.py serve` as a person runs it."""

    def __init__(self, var: Path) -> None:
        self.var = var
        self.port = free_port()
        inherited = {
            key: value
            for key, value in os.environ.items()
            if not key.startswith(("RATEWRIGHT_", "PYTEST_", "DJANGO_"))
        }
        self.process = subprocess.Popen(
            [sys.executable, "manage.py", "serve", "--port", str(self.port), "--workers", "1"],
            cwd=CHECKOUT,
            env={**inherited, "RATEWRIGHT_VAR": str(var)},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            start_new_session=True,
        )

    def read_until(self, words: str) -> str:
        """Everything that it says up to the line with these words."""
        text = ""
        assert self.process.stdout is not None
        for line in self.process.stdout:
            text += line
            if words in line:
                return text
        raise AssertionError(f"it ended without saying {words!r}:\n{text}")

    def pids(self) -> list[int]:
        own = children_of(self.process.pid)
        return own + [grandchild for child in own for grandchild in children_of(child)]


@pytest.fixture
def serve(tmp_path: Path) -> Iterator[Serve]:
    command = Serve(tmp_path / "var")
    yield command
    with command.process:
        if command.process.poll() is None:
            command.process.terminate()


@pytest.mark.processes
def test_serve_tells_the_address_and_a_password_that_only_its_user_can_read(serve: Serve) -> None:
    said = serve.read_until("Ctrl-C")
    assert f"http://127.0.0.1:{serve.port}/" in said
    password = re.search(r"Log in as admin with the password (\S+) ", said)
    assert password is not None
    kept = serve.var / "first_account.txt"
    assert kept.read_text() == f"name: admin\npassword: {password.group(1)}\n"
    for secret in (kept, serve.var / "secret_key"):
        assert stat.S_IMODE(secret.stat().st_mode) == 0o600
    assert stat.S_IMODE(serve.var.stat().st_mode) == 0o700

    connection = http.client.HTTPConnection("127.0.0.1", serve.port, timeout=10)
    connection.request("GET", "/api/v1/health/")
    assert connection.getresponse().status == 200
    connection.close()

    pids = serve.pids()
    assert len(pids) >= 5
    serve.process.send_signal(signal.SIGINT)
    assert "Stopped; nothing is left running." in serve.read_until("Stopped")
    assert serve.process.wait(10) == 0
    assert not any(is_running(pid) for pid in pids)

    again = Serve(serve.var)
    with again.process:
        said = again.read_until("Ctrl-C")
        assert "the first password is in" in said
        assert password.group(1) not in said
        again.process.terminate()
        again.read_until("Stopped")


@pytest.mark.django_db
def test_the_file_of_the_first_password_is_named_only_while_it_fits(
    installation: LocalInstallation, monkeypatch: pytest.MonkeyPatch
) -> None:
    # The transaction of a test must not lose its connection.
    monkeypatch.setattr("kinetics_db.web.management.commands.serve.connection.close", lambda: None)
    installation.var.mkdir()
    file = installation.first_account_file
    assert f"(kept in {file})" in account_line(installation)
    assert f"the first password is in {file}" in account_line(installation)
    set_password(username="admin", password="another-good-one")
    for _ in ("does not fit", "is gone"):
        said = account_line(installation)
        assert str(file) not in said
        assert "manage.py changepassword admin" in said
        file.unlink(missing_ok=True)


@pytest.mark.processes
def test_a_killed_serve_leaves_nothing_running(serve: Serve) -> None:
    serve.read_until("Ctrl-C")
    pids = serve.pids()
    assert len(pids) >= 5
    serve.process.kill()
    folder = socket_path(serve.var / "valkey").parent
    wait_until(
        lambda: not any(is_running(pid) for pid in pids) and not folder.exists(),
        within=30,
        what="all processes have ended",
    )


@pytest.mark.processes
def test_serve_ends_with_one_clear_line_when_a_child_dies(serve: Serve) -> None:
    serve.read_until("Ctrl-C")
    pids = serve.pids()
    table = subprocess.check_output(["ps", "-A", "-o", "pid=,ppid=,command="], text=True).splitlines()
    rows = [line.split(maxsplit=2) for line in table]
    (sweeper,) = [
        int(pid) for pid, parent, command in rows if int(parent) == serve.process.pid and "sweep" in command
    ]
    os.kill(sweeper, signal.SIGKILL)
    assert serve.process.stdout is not None
    (line,) = serve.process.stdout.read().splitlines()
    assert line == (
        "CommandError: The sweeper was killed by SIGKILL; everything else has been stopped. "
        f"Start again: make serve. Log: {serve.var / 'log' / 'sweeper.log'}"
    )
    assert serve.process.wait(40) == 1
    assert not any(is_running(pid) for pid in pids)
