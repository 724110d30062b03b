"""The commands that a newcomer meets first."""

from __future__ import annotations

import os
import re
import subprocess
from pathlib import Path

import pytest

from tests.processes.stand_ins import CHECKOUT

MAKEFILE = (CHECKOUT / "Makefile").read_text()


def make(*arguments: str, folder: Path = CHECKOUT) -> str:
    ours = ("MAKE", "MFLAGS", "PORT", "ONCE", "JOBS", "ARGS", "PYTHON")
    inherited = {key: value for key, value in os.environ.items() if not key.startswith(ours)}
    return subprocess.run(
        ["make", *arguments], cwd=folder, env=inherited, capture_output=True, text=True, check=True
    ).stdout


def test_make_alone_lists_every_target_with_what_it_does() -> None:
    listed = set(re.findall(r"^  make (\S+) +\S", make(), flags=re.MULTILINE))
    declared = set(re.findall(r"^\.PHONY: ([^\n]*)", MAKEFILE, flags=re.MULTILINE)[0].split())
    assert listed == declared - {"development"}
    assert {"help", "demo", "serve", "test", "check", "check-slow", "lock", "clean"} <= listed


@pytest.mark.parametrize(
    "newer_than_make_3_81", [r"^\.ONESHELL", r"!=", r"\$\(file ", r"^\.RECIPEPREFIX", r"::=", r"^\S+ \S+ &:"]
)
def test_it_uses_nothing_newer_than_the_make_of_macos(newer_than_make_3_81: str) -> None:
    assert re.search(newer_than_make_3_81, MAKEFILE, flags=re.MULTILINE) is None


def test_once_and_port_reach_the_demo() -> None:
    commands = make("--dry-run", "demo", "ONCE=1", "PORT=9000").splitlines()
    assert commands[-1].split()[1:] == ["manage.py", "demo", "--port", "9000", "--once"]
    assert make("--dry-run", "demo").split()[-4:] == ["manage.py", "demo", "--port", "8765"]


def test_an_empty_port_is_the_usual_one() -> None:
    for target in ("demo", "serve"):
        assert make("--dry-run", target, "PORT=").split()[-2:] == ["--port", "8765"]


@pytest.mark.parametrize(
    ("interpreter", "chosen"),
    [("/bin/sh", ".venv/bin/python"), ("/nowhere/python", "python3"), ("", "python3")],
)
def test_the_python_of_the_environment_is_taken_only_if_it_runs(
    tmp_path: Path, interpreter: str, chosen: str
) -> None:
    (tmp_path / "Makefile").write_text(MAKEFILE)
    if interpreter:
        python = tmp_path / ".venv" / "bin" / "python"
        python.parent.mkdir(parents=True)
        python.write_text(f"#!{interpreter}\n")
        python.chmod(0o755)
    preflight, install = make("--dry-run", "serve", folder=tmp_path).splitlines()[:2]
    assert preflight.split()[0] == install.split()[0] == chosen


def test_the_preflight_comes_before_anything_is_installed() -> None:
    for target in ("demo", "serve", "development"):
        first, second = make("--dry-run", target).splitlines()[:2]
        assert "preflight.py" in first
        assert "install.py" in second


def test_the_suite_runs_on_postgresql_and_again_on_sqlite_without_the_engine() -> None:
    commands = make("--dry-run", "test")
    (sqlite,) = [line for line in commands.splitlines() if "RATEWRIGHT_TEST_DB=sqlite" in line]
    assert "tests/engine" not in sqlite
    assert "lint-imports" in commands
    assert "makemigrations --check" in commands
