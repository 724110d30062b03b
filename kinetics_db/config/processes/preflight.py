"""Says in plain words what this machine lacks, and how to get it, before anything is installed.

Run it as ``python3 kinetics_db/config/processes/preflight.py [demo|serve|test]``. It must work on a bare and
possibly old Python: standard library only, nothing of this project, and no syntax newer than Python 3.6
(so annotations that an old Python could not evaluate stand in quotes).
"""

import os
import shutil
import sys
from pathlib import Path

OLDEST_PYTHON = (3, 11)
FIRST_PYTHON_TOO_NEW = (3, 15)
OLDEST_SQLITE = (3, 31, 0)
MEGABYTES_TO_INSTALL = 1000
MEGABYTES_TO_RUN = 200
DEFAULT_PORT = "8765"

NETWORK_FILE_SYSTEMS = {"nfs", "nfs4", "cifs", "smb3", "smbfs", "afs", "ceph", "lustre", "glusterfs"}
NETWORK_FILE_SYSTEMS |= {"beegfs", "gpfs", "fuse.sshfs", "fuse.glusterfs", "fuse.s3fs", "fuse.rclone"}

VERSIONED_POSTGRESQL = ("/usr/lib/postgresql", "/opt/homebrew/opt", "/usr/local/opt", "/usr/local/pgsql")


def checkout() -> Path:
    return Path(__file__).resolve().parents[3]


def var_folder(purpose: str) -> Path:
    """Where the data are kept: invented ones in a folder of their own, unless RATEWRIGHT_VAR says where."""
    unless_set = checkout() / "var" / "demo" if purpose == "demo" else checkout() / "var"
    return Path(os.environ.get("RATEWRIGHT_VAR") or unless_set).absolute()


def has_environment(folder: Path) -> bool:
    return (folder / ".venv" / "bin" / "python").exists()


def wrong_python(purpose: str) -> "str | None":
    """What is wrong with the Python that runs this, or None."""
    version = sys.version_info[:2]
    if OLDEST_PYTHON <= version < FIRST_PYTHON_TOO_NEW:
        return None
    return (
        f"Python {version[0]}.{version[1]} at {sys.executable} cannot be used: it has to be "
        f"{OLDEST_PYTHON[0]}.{OLDEST_PYTHON[1]} to {FIRST_PYTHON_TOO_NEW[0]}.{FIRST_PYTHON_TOO_NEW[1] - 1}. "
        f"Name a suitable one, for instance: make {purpose} PYTHON=python{OLDEST_PYTHON[0]}.{OLDEST_PYTHON[1] + 1}"
    )


def missing_venv(folder: Path) -> "str | None":
    """A private environment cannot be made although there is none yet."""
    if has_environment(folder):
        return None
    for module in ("venv", "ensurepip"):
        try:
            __import__(module)
        except ImportError:
            return (
                f"This Python has no '{module}' module, which makes the private environment. Debian/Ubuntu: "
                f"apt install python3-venv (or python{sys.version_info[0]}.{sys.version_info[1]}-venv); "
                "elsewhere install a complete Python."
            )
    return None


def not_writable(folder: Path, purpose: str) -> "str | None":
    """Files cannot be made in a folder, or the folder itself cannot."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / f".write-test-{os.getpid()}"
        probe.write_text("x")
        probe.unlink()
    except OSError as error:
        elsewhere = "" if folder == checkout() else "; RATEWRIGHT_VAR=/some/folder puts it elsewhere"
        return (
            f"Cannot write to {folder} ({error.strerror}), where {purpose}. "
            f"Make it writable (chown or chmod), or work in a copy of your own{elsewhere}."
        )
    return None


def disk_full(folder: Path) -> "str | None":
    """Too little room to install, or, once that is done, to run."""
    wanted = MEGABYTES_TO_RUN if has_environment(folder) else MEGABYTES_TO_INSTALL
    free = shutil.disk_usage(str(folder)).free / 1e6
    if free >= wanted:
        return None
    return f"Only {free:.0f} MB are free on the disk of {folder}; {wanted} MB are needed. Free some space."


def wrong_port(text: str, purpose: str) -> "str | None":
    """The port is no port, is reserved, or somebody listens there."""
    import socket

    port = int(text) if text.isdigit() else 0
    if not 1024 <= port <= 65535:
        return f"PORT={text} is not a port that can be used: give a number from 1024 to 65535."
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(("127.0.0.1", port))
        except OSError:
            other = port + 1 if port < 65535 else port - 1
            return f"Port {port} is taken by another program. Choose another one: make {purpose} PORT={other}"
    return None


def already_running(var: Path) -> "str | None":
    """Another supervisor holds this folder; asked first, for it also explains a busy port."""
    import fcntl

    try:
        with (var / "supervisor.lock").open("r+") as file:
            holder, _, address = file.read().partition("\n")
            where = f" at {address.strip()}" if address.strip() else ""
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                if holder.isdigit() and is_alive(int(holder)):
                    return (
                        f"Ratewright already runs from {var}{where} as process {holder}. "
                        f"Use that one, or stop it: kill {holder}"
                    )
    except OSError:
        return None
    return None


def is_alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True


def file_system_of(folder: str, mounts: str = "/proc/mounts") -> str:
    """Kind of the file system that holds a folder, '' where it cannot be known."""
    best, kind = "", ""
    folder = os.path.realpath(folder)
    try:
        lines = Path(mounts).read_text().splitlines()
    except OSError:
        return ""
    for line in lines:
        words = line.split()
        if len(words) < 3:
            continue
        point = words[1].replace("\\040", " ").rstrip("/")
        if (folder == point or folder.startswith(point + "/")) and len(point) >= len(best):
            best, kind = point, words[2]
    return kind


def unfit_sqlite(var: Path, purpose: str) -> "str | None":
    """SQLite is missing or too old, or this disk cannot hold its database safely."""
    try:
        import sqlite3
    except ImportError:
        return (
            "This Python has no 'sqlite3' module. Debian/Ubuntu: apt install libsqlite3-0; "
            "for a Python you built yourself: install libsqlite3-dev and build it again."
        )
    if sqlite3.sqlite_version_info < OLDEST_SQLITE:
        needed = ".".join(str(part) for part in OLDEST_SQLITE)
        found = sqlite3.sqlite_version
        return f"SQLite {found} is too old: {needed} or newer is needed. A newer Python brings one."
    elsewhere = f"Put the data on a local disk: RATEWRIGHT_VAR=/local/folder make {purpose}"
    kind = file_system_of(str(var))
    if kind in NETWORK_FILE_SYSTEMS:
        return f"{var} lies on a network file system ({kind}), where SQLite can lose data. {elsewhere}"
    probe = var / f".wal-test-{os.getpid()}.sqlite3"
    try:
        connection = sqlite3.connect(str(probe))
        try:
            mode = connection.execute("PRAGMA journal_mode=WAL").fetchone()[0]
            connection.execute("CREATE TABLE probe (value INTEGER)")
            connection.commit()
        finally:
            connection.close()
        if mode != "wal":
            return f"SQLite cannot keep a write-ahead log in {var}. {elsewhere}"
    except sqlite3.Error as error:
        return f"SQLite cannot keep a database in {var} ({error}). {elsewhere}"
    finally:
        for file in var.glob(probe.name + "*"):
            file.unlink()
    return None


def wheels_bring_servers() -> bool:
    """Whether the locked wheels hold a Valkey and a PostgreSQL for this kind of machine."""
    import platform

    if sys.platform == "darwin":
        return True
    return (
        sys.platform.startswith("linux")
        and platform.machine() in ("x86_64", "aarch64")
        and platform.libc_ver()[0] == "glibc"
    )


def missing_queue_server() -> "str | None":
    if wheels_bring_servers() or shutil.which("valkey-server") or shutil.which("redis-server"):
        return None
    return (
        "No Valkey or Redis server, and the bundled one does not fit this kind of machine. Debian/Ubuntu: "
        "apt install redis-server; Fedora: dnf install valkey; Alpine: apk add valkey."
    )


def missing_postgresql() -> "str | None":
    if wheels_bring_servers() or shutil.which("initdb"):
        return None
    if any("initdb" in files for folder in VERSIONED_POSTGRESQL for _, _, files in os.walk(folder)):
        return None
    return (
        "No PostgreSQL server, and the bundled one does not fit this kind of machine. Debian/Ubuntu: "
        "apt install postgresql; Fedora: dnf install postgresql-server; Alpine: apk add postgresql."
    )


BROWSERS = ("chromium", "chromium-browser", "google-chrome-stable", "google-chrome")


def missing_browser() -> "str | None":
    """No Chromium for the tests of the pages; $CHROMIUM names one that is not on PATH."""
    named = os.environ.get("CHROMIUM")
    if named:
        return None if shutil.which(named) else f"CHROMIUM={named} is no program that can be run."
    if any(shutil.which(name) for name in BROWSERS):
        return None
    return (
        "No Chromium, in which the pages are tested. Debian: apt install chromium; Fedora: dnf install "
        "chromium; elsewhere install it and name it with CHROMIUM=/path/to/chromium."
    )


def problems(purpose: str) -> "list[str]":
    """Everything that stands in the way of 'demo' (or 'serve') or 'test', a line each."""
    python = wrong_python(purpose)
    if python:
        return [python]  # the rest would be about a Python that is not going to be used
    folder, var = checkout(), var_folder(purpose)
    found = [missing_venv(folder), not_writable(folder, "the programs are installed"), disk_full(folder)]
    found.append(missing_queue_server())
    if purpose == "test":
        found.append(missing_postgresql())
        found.append(missing_browser())
    else:
        unwritable = not_writable(var, "the data are kept")
        found.append(unwritable or unfit_sqlite(var, purpose))
        found.append(already_running(var) or wrong_port(os.environ.get("PORT") or DEFAULT_PORT, purpose))
    return [line for line in found if line]


def main(arguments: "list[str]") -> int:
    purpose = arguments[0] if arguments else "demo"
    if purpose not in ("demo", "serve", "test"):
        sys.stderr.write("usage: preflight.py [demo|serve|test]\n")
        return 2
    lines = problems(purpose)
    for line in lines:
        sys.stderr.write(f"* {line}\n")
    return 1 if lines else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
