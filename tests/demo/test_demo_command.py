"""`manage.py demo` as a person starts it."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from django.core.management import call_command
from django.core.management.base import CommandError

from kinetics_db.accounts.models import User
from kinetics_db.config.processes.guard import is_running
from kinetics_db.config.processes.local import LocalInstallation
from kinetics_db.demo.management.commands.demo import LOCAL_SETTINGS, account, what_is_done
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


class Replaced(Exception):
    """Stands for the end of this program when it becomes another."""


def test_the_demonstration_keeps_its_data_apart_from_ones_own(
    monkeypatch: pytest.MonkeyPatch, settings: Any
) -> None:
    became: list[tuple[str, list[str], dict[str, str]]] = []

    def become(*what: Any) -> None:
        became.append(what)
        raise Replaced

    settings.SETTINGS_MODULE = LOCAL_SETTINGS
    monkeypatch.setattr(os, "execve", become)
    for unset in ({}, {"RATEWRIGHT_VAR": ""}):
        monkeypatch.delenv("RATEWRIGHT_VAR", raising=False)
        for name, value in unset.items():
            monkeypatch.setenv(name, value)
        with pytest.raises(Replaced):
            call_command("demo", "--port", "9000", "--once")
        program, command, environment = became.pop()
        assert (program, command[0]) == (sys.executable, sys.executable)
        assert command[1:] == [str(CHECKOUT / "manage.py"), "demo", "--port", "9000", "--once"]
        assert environment == {**os.environ, "RATEWRIGHT_VAR": str(CHECKOUT / "var" / "demo")}


def test_a_folder_that_is_named_is_used(monkeypatch: pytest.MonkeyPatch, settings: Any) -> None:
    class Started(Exception):
        pass

    def start(installation: LocalInstallation) -> None:
        assert installation.var == settings.VAR_DIR.resolve()
        raise Started

    settings.SETTINGS_MODULE = LOCAL_SETTINGS
    monkeypatch.setenv("RATEWRIGHT_VAR", str(settings.VAR_DIR))
    monkeypatch.setattr(os, "execve", lambda *_: pytest.fail("another process was started"))
    monkeypatch.setattr(LocalInstallation, "start", start)
    with pytest.raises(Started):
        call_command("demo", "--port", "9000")


@pytest.mark.parametrize("named", [None, "/somewhere/else"])
def test_make_checks_and_uses_the_same_folder(tmp_path: Path, named: str | None) -> None:
    tell = tmp_path / "python"
    tell.write_text('#!/bin/sh\necho "$RATEWRIGHT_VAR $*"\n')
    tell.chmod(0o755)
    inherited = {k: v for k, v in os.environ.items() if not k.startswith(("MAKE", "MFLAGS", "RATEWRIGHT_"))}
    environment = inherited | ({"RATEWRIGHT_VAR": named} if named else {})
    folders = {}
    for target in ("demo", "serve"):
        said = subprocess.run(
            ["make", target, f"PYTHON={tell}", f"BIN={tmp_path}"],
            cwd=CHECKOUT, env=environment, capture_output=True, text=True, check=True,
        ).stdout  # fmt: skip
        preflight, *_, command = said.splitlines()
        assert "preflight.py" in preflight and f"manage.py {target}" in command
        folders[target] = {line.split(" ")[0] for line in (preflight, command)}
    assert folders["demo"] == {named or str(CHECKOUT / "var" / "demo")}
    assert folders["serve"] == {named or ""}


def test_a_line_on_the_fits_says_what_is_computed_now_and_what_was_before() -> None:
    loaded = SimpleNamespace(runs=24, is_new=False)
    more = SimpleNamespace(runs=24, is_new=True)
    assert what_is_done("tern", more, [1, 2, 3], [1, 2, 3]) == "3 fits asked for"
    assert what_is_done("tern", loaded, [1, 2, 3], [3]) == "1 fit asked for, 2 computed before"
    assert what_is_done("tern", more, [1, 2, 3], []) == "3 fits computed before"
    already = "tern is here already (24 runs, 3 fits); nothing computed again"
    assert what_is_done("tern", loaded, [1, 2, 3], []) == already


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
    assert "tern is here already (24 runs, 3 fits); nothing computed again" in second.said()
    assert not re.search(r"logged|asked for|fit of '", second.said())
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
        line = "The worker was killed by SIGKILL; everything else has been stopped. Start again: make demo"
        assert line in demo.said()
        assert "Traceback" not in demo.said()
