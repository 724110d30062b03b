"""What a person is told before anything is installed."""

from __future__ import annotations

import ast
import os
import shutil
import socket
import sqlite3
import subprocess
import sys
from collections import namedtuple
from pathlib import Path

import pytest

from kinetics_db.config.processes import preflight
from kinetics_db.config.processes.supervisor import Supervisor
from tests.services.processes import free_port

SCRIPT = Path(preflight.__file__)


@pytest.fixture
def checkout(tmp_path: Path) -> Path:
    """A fresh checkout: nothing but the script in its place."""
    folder = tmp_path / "checkout"
    place = folder / SCRIPT.relative_to(SCRIPT.parents[3])
    place.parent.mkdir(parents=True)
    shutil.copy(SCRIPT, place)
    return folder


def run(checkout: Path, purpose: str = "demo", **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the script as make does, on the Python that runs the suite, with more environment variables."""
    inherited = {
        key: value for key, value in os.environ.items() if not key.startswith(("RATEWRIGHT_", "PORT"))
    }
    return subprocess.run(
        [sys.executable, SCRIPT.relative_to(SCRIPT.parents[3]), purpose],
        cwd=checkout,
        env={**inherited, "PORT": str(free_port()), **environment},
        capture_output=True,
        text=True,
        check=False,
    )


@pytest.mark.parametrize("purpose", ["demo", "serve", "test"])
def test_nothing_is_said_and_nothing_left_where_all_is_fine(checkout: Path, purpose: str) -> None:
    done = run(checkout, purpose)
    assert (done.stdout, done.stderr, done.returncode) == ("", "", 0)
    left = {path.name for path in checkout.rglob("*") if path.is_file()}
    assert left == {"preflight.py"}


def test_an_unknown_purpose_is_answered_with_the_usage(checkout: Path) -> None:
    done = run(checkout, "breakfast")
    assert done.returncode == 2
    assert "usage: preflight.py [demo|serve|test]" in done.stderr


def test_it_is_written_in_a_language_that_python_3_6_can_read() -> None:
    # feature_version is best effort from 3.7 on, so names newer than 3.6 are looked for besides.
    tree = ast.parse(SCRIPT.read_text(), feature_version=(3, 7))
    assert not [node for node in ast.walk(tree) if isinstance(node, (ast.NamedExpr, ast.Match))]
    imported = {name.name for node in ast.walk(tree) if isinstance(node, ast.Import) for name in node.names}
    from_modules = {node.module for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    assert from_modules == {"pathlib"}  # in particular no `from __future__ import annotations`
    assert imported == {"os", "shutil", "sys", "socket", "fcntl", "sqlite3", "platform"}


@pytest.mark.parametrize("version", [(3, 6), (3, 10), (3, 15)])
def test_an_unsuitable_python_is_named_with_the_cure_and_nothing_else(
    monkeypatch: pytest.MonkeyPatch, version: tuple[int, int]
) -> None:
    monkeypatch.setattr(sys, "version_info", (*version, 0, "final", 0))
    (line,) = preflight.problems("serve")
    assert line.startswith(f"Python {version[0]}.{version[1]} at {sys.executable} cannot be used")
    assert "3.11 to 3.14" in line
    assert "make serve PYTHON=python3.12" in line


@pytest.mark.parametrize("module", ["venv", "ensurepip"])
def test_a_python_without_venv_is_told_the_package_that_brings_it(
    checkout: Path, tmp_path: Path, module: str
) -> None:
    fakes = tmp_path / "fakes"
    fakes.mkdir()
    (fakes / f"{module}.py").write_text("raise ImportError('left out by the distribution')\n")
    done = run(checkout, PYTHONPATH=str(fakes))
    assert done.returncode == 1
    assert f"no '{module}' module" in done.stderr
    assert "apt install python3-venv" in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_an_environment_that_is_there_already_needs_no_venv_module(checkout: Path, tmp_path: Path) -> None:
    fakes = tmp_path / "fakes"
    fakes.mkdir()
    (fakes / "ensurepip.py").write_text("raise ImportError\n")
    (checkout / ".venv" / "bin").mkdir(parents=True)
    (checkout / ".venv" / "bin" / "python").symlink_to(sys.executable)
    assert run(checkout, PYTHONPATH=str(fakes)).returncode == 0


def test_a_data_folder_that_cannot_be_made_is_named(checkout: Path, tmp_path: Path) -> None:
    # A file in the way refuses even root, who may write everywhere else.
    (tmp_path / "file").write_text("")
    folder = tmp_path / "file" / "var"
    done = run(checkout, RATEWRIGHT_VAR=str(folder))
    assert done.returncode == 1
    assert done.stderr == (
        f"* Cannot write to {folder} (Not a directory), where the data are kept. "
        "Make it writable (chown or chmod), or work in a copy of your own; "
        "RATEWRIGHT_VAR=/some/folder puts it elsewhere.\n"
    )


def test_a_checkout_without_write_permission_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "write_text", refuse)
    line = preflight.not_writable(preflight.checkout(), "the programs are installed")
    assert line is not None
    assert line.startswith(f"Cannot write to {preflight.checkout()} (Permission denied)")


def test_a_full_disk_is_told_with_what_is_free_and_what_is_needed(
    checkout: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    usage = namedtuple("usage", "total used free")
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage(10**12, 10**12 - 10**8, 10**8))
    line = preflight.disk_full(checkout)
    assert line == f"Only 100 MB are free on the disk of {checkout}; 1000 MB are needed. Free some space."


def test_a_busy_port_is_named_with_another_choice(checkout: Path) -> None:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        listener.listen()
        port = listener.getsockname()[1]
        for purpose in ("demo", "serve"):
            done = run(checkout, purpose, PORT=str(port))
            assert done.returncode == 1
            assert done.stderr.startswith(
                f"* Port {port} is taken by another program. Choose another one: make {purpose} PORT="
            )
        assert run(checkout, "test", PORT=str(port)).returncode == 0


@pytest.mark.parametrize("port", ["http", "80", "70000", "-1", "8765.5"])
def test_what_is_no_usable_port_is_told_so(checkout: Path, port: str) -> None:
    done = run(checkout, PORT=port)
    assert done.stderr == f"* PORT={port} is not a port that can be used: give a number from 1024 to 65535.\n"
    assert done.returncode == 1


def test_an_installation_that_runs_already_is_named_with_address_and_process(
    checkout: Path, tmp_path: Path
) -> None:
    var = tmp_path / "var"
    with Supervisor(var / "log", lock=var / "supervisor.lock", address="http://127.0.0.1:9000/"):
        done = run(checkout, RATEWRIGHT_VAR=str(var))
    assert done.stderr == (
        f"* Ratewright already runs from {var} at http://127.0.0.1:9000/ as process {os.getpid()}. "
        f"Use that one, or stop it: kill {os.getpid()}\n"
    )
    assert run(checkout, RATEWRIGHT_VAR=str(var)).returncode == 0


def test_an_installation_of_which_only_the_process_is_known_is_named_all_the_same(tmp_path: Path) -> None:
    with Supervisor(tmp_path / "log", lock=tmp_path / "supervisor.lock"):
        line = preflight.already_running(tmp_path)
    assert line is not None
    assert line.startswith(f"Ratewright already runs from {tmp_path} as process {os.getpid()}. ")


@pytest.mark.parametrize(("purpose", "folder"), [("demo", "var/demo"), ("serve", "var")])
def test_each_command_looks_at_its_own_folder(checkout: Path, purpose: str, folder: str) -> None:
    with Supervisor(checkout / folder / "log", lock=checkout / folder / "supervisor.lock"):
        assert f"already runs from {checkout / folder} " in run(checkout, purpose).stderr
        assert run(checkout, "serve" if purpose == "demo" else "demo").returncode == 0


def test_asking_does_not_take_the_lock_away(tmp_path: Path) -> None:
    var = tmp_path / "var"
    with Supervisor(var / "log", lock=var / "supervisor.lock"):
        for _ in range(2):
            assert preflight.already_running(var) is not None


MOUNTS = """\
/dev/sda1 / ext4 rw 0 0
server:/home /home nfs4 rw 0 0
//server/share /mnt/lab\\040share cifs rw 0 0
/dev/sdb1 /home/local xfs rw 0 0
"""


@pytest.mark.parametrize(
    ("folder", "kind"),
    [
        ("/srv/var", "ext4"),
        ("/home/ann/var", "nfs4"),
        ("/homework/var", "ext4"),
        ("/mnt/lab share/var", "cifs"),
        ("/home/local/var", "xfs"),
    ],
)
def test_the_file_system_of_a_folder_is_that_of_its_longest_mount_point(
    tmp_path: Path, folder: str, kind: str
) -> None:
    (tmp_path / "mounts").write_text(MOUNTS)
    assert preflight.file_system_of(folder, str(tmp_path / "mounts")) == kind


def test_a_system_without_a_list_of_mounts_is_not_refused(tmp_path: Path) -> None:
    assert preflight.file_system_of("/srv", str(tmp_path / "none")) == ""


def test_a_network_file_system_is_refused_with_the_way_out(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(preflight, "file_system_of", lambda folder: "nfs4")
    line = preflight.unfit_sqlite(tmp_path, "serve")
    assert line is not None
    assert "network file system (nfs4)" in line
    assert "RATEWRIGHT_VAR=/local/folder make serve" in line


def test_an_old_sqlite_is_named_with_the_version_needed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sqlite3, "sqlite_version_info", (3, 22, 0))
    monkeypatch.setattr(sqlite3, "sqlite_version", "3.22.0")
    assert preflight.unfit_sqlite(tmp_path, "demo") == (
        "SQLite 3.22.0 is too old: 3.31.0 or newer is needed. A newer Python brings one."
    )


def test_a_python_without_sqlite_is_told_what_to_install(checkout: Path, tmp_path: Path) -> None:
    fakes = tmp_path / "fakes"
    fakes.mkdir()
    (fakes / "sqlite3.py").write_text("raise ImportError\n")
    done = run(checkout, PYTHONPATH=str(fakes))
    assert done.returncode == 1
    assert "no 'sqlite3' module" in done.stderr


def test_where_the_wheels_do_not_fit_the_servers_have_to_be_on_path(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(preflight, "wheels_bring_servers", lambda: False)
    monkeypatch.setattr(preflight, "VERSIONED_POSTGRESQL", (str(tmp_path / "versions"),))
    monkeypatch.setenv("PATH", str(tmp_path))
    queue, database = preflight.missing_queue_server(), preflight.missing_postgresql()
    assert queue is not None and "apt install redis-server" in queue
    assert database is not None and "apt install postgresql" in database
    (tmp_path / "versions" / "16" / "bin").mkdir(parents=True)
    for program in (tmp_path / "redis-server", tmp_path / "versions" / "16" / "bin" / "initdb"):
        program.write_text("#!/bin/sh\n")
        program.chmod(0o755)
    assert preflight.missing_queue_server() is None
    assert preflight.missing_postgresql() is None


def test_every_problem_is_told_at_once(checkout: Path, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    fakes = tmp_path / "fakes"
    fakes.mkdir()
    (fakes / "venv.py").write_text("raise ImportError\n")
    done = run(checkout, PORT="0", RATEWRIGHT_VAR=str(tmp_path / "file" / "var"), PYTHONPATH=str(fakes))
    beginnings = ("* This Python has no 'venv'", "* Cannot write to ", "* PORT=0 is not a port")
    lines = done.stderr.splitlines()
    assert len(lines) == len(beginnings)
    assert all(line.startswith(beginning) for line, beginning in zip(lines, beginnings, strict=True))


def test_a_missing_browser_is_told_with_the_way_to_get_it(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.delenv("CHROMIUM", raising=False)
    monkeypatch.setenv("PATH", str(tmp_path))
    told = preflight.missing_browser()
    assert told is not None and "apt install chromium" in told and "CHROMIUM=/path/to/chromium" in told
    (tmp_path / "chromium").write_text("#!/bin/sh\n")
    (tmp_path / "chromium").chmod(0o755)
    assert preflight.missing_browser() is None


def test_a_browser_that_is_named_has_to_be_a_program(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("CHROMIUM", str(tmp_path / "nothing"))
    assert "is no program that can be run" in str(preflight.missing_browser())
    monkeypatch.setenv("CHROMIUM", sys.executable)
    assert preflight.missing_browser() is None
