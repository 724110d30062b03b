"""`manage.py demo` as a person starts it."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import pytest
from django.core.management import call_command
from django.core.management.base import CommandError

from kinetics_db.accounts.models import User
from kinetics_db.config.processes.guard import is_running
from kinetics_db.demo.management.commands.demo import account
from tests.services.processes import CHECKOUT, children_of, free_port, wait_until


@pytest.mark.django_db
def test_the_password_is_random_kept_private_and_used_again(tmp_path: Path) -> None:
    file = tmp_path / "demo-password.txt"
    user, password = account(file)
    assert user.username == "demo" and user.check_password(password)
    assert file.read_text() == password + "\n"
    assert file.stat().st_mode & 0o777 == 0o600
    assert account(file)[1] == password
    assert len(password) >= 16


@pytest.mark.django_db
@pytest.mark.parametrize("left", [None, "", "an older password\n"])
def test_an_account_whose_file_is_lost_or_wrong_gets_a_new_password(tmp_path: Path, left: str | None) -> None:
    file = tmp_path / "demo-password.txt"
    _, first = account(file)
    file.unlink() if left is None else file.write_text(left)
    user, second = account(file)
    assert second != first
    assert user.check_password(second) and file.read_text() == second + "\n"
    assert User.objects.count() == 1


def test_other_settings_than_those_of_one_machine_are_refused() -> None:
    with pytest.raises(CommandError, match="unset DJANGO_SETTINGS_MODULE"):
        call_command("demo")


def command_of(pid: int) -> str:
    shown = subprocess.run(
        ["ps", "-o", "command=", "-p", str(pid)], capture_output=True, text=True, check=False
    )
    return f" {shown.stdout.strip()} "


class Demo:
    """The command in a process group of its own, on a folder of its own."""

    def __init__(self, var: Path, *arguments: str) -> None:
        names = ("RATEWRIGHT_", "DJANGO_", "PYTEST_", "COV_")
        environment = {name: value for name, value in os.environ.items() if not name.startswith(names)}
        environment["RATEWRIGHT_VAR"] = str(var)
        self.port = free_port()
        self.output = var.with_suffix(".out")
        with self.output.open("wb") as out:
            self.process = subprocess.Popen(
                [sys.executable, "manage.py", "demo", "--port", str(self.port), *arguments],
                cwd=CHECKOUT,
                env=environment,
                stdout=out,
                stderr=subprocess.STDOUT,
                start_new_session=True,
            )

    def said(self) -> str:
        return self.output.read_text(errors="replace")

    def ended(self, within: float) -> int:
        try:
            return self.process.wait(within)
        finally:
            if self.process.poll() is None:
                self.process.terminate()
                self.process.wait(60)


@pytest.mark.slow
@pytest.mark.processes
@pytest.mark.timeout(600)
def test_once_ends_with_the_grid_and_a_second_start_reuses_what_is_there(tmp_path: Path) -> None:
    first = Demo(tmp_path / "var", "--once")
    assert first.ended(within=300) == 0, first.said()
    said = first.said()
    assert re.search(r"^ *\d+ s  24 files read", said, re.MULTILINE)
    assert "INVENTED" in said and "AICc above the lowest" in said
    assert len(re.findall(r"^T-\d\d .*agrees", said, re.MULTILINE)) == 24
    (password,) = re.findall(r"password  (\S+)", said)
    assert (tmp_path / "var" / "demo-password.txt").read_text().strip() == password

    second = Demo(tmp_path / "var", "--once")
    assert second.ended(within=120) == 0, second.said()
    assert f"password  {password}" in second.said()
    assert (
        second.said().split("tern (invented)")[1].split("s  done")[0].rsplit("\n", 1)[0]
        == (said.split("tern (invented)")[1].split("s  done")[0].rsplit("\n", 1)[0])
    )


@pytest.mark.slow
@pytest.mark.processes
@pytest.mark.timeout(600)
@pytest.mark.parametrize("kill", ["worker", "ctrl-c"])
def test_nothing_is_left_running_when_a_child_dies_or_somebody_interrupts(tmp_path: Path, kill: str) -> None:
    demo = Demo(tmp_path / "var")
    try:
        wait_until(lambda: "24 runs logged" in demo.said(), within=120, what="the runs are logged")
        family = [demo.process.pid, *children_of(demo.process.pid)]
        assert len(family) >= 5  # queue, worker, sweeper, web server
        if kill == "worker":
            (worker,) = (pid for pid in family[1:] if " worker " in command_of(pid))
            os.kill(worker, signal.SIGKILL)
        else:
            os.kill(demo.process.pid, signal.SIGINT)
    finally:
        status = demo.ended(within=90)
    assert status == (1 if kill == "worker" else 0), demo.said()
    wait_until(lambda: not any(map(is_running, family)), within=10, what="all children have ended")
    if kill == "worker":
        assert "The worker has died" in demo.said()
        assert "Traceback" not in demo.said()
