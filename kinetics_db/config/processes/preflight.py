"""Says in plain words what this machine lacks, and how to get it, before anything is installed.

Run it as ``python3 kinetics_db/config/processes/preflight.py [demo|test]``. It must work on a bare and
possibly old Python: standard library only, nothing of this project, and no syntax newer than Python 3.6.
"""
# ruff: noqa: UP

import os
import shutil
import sys

OLDEST_PYTHON = (3, 11)
FIRST_PYTHON_TOO_NEW = (3, 15)
OLDEST_SQLITE = (3, 31, 0)
FREE_BYTES_TO_INSTALL = 1000 * 1000 * 1000
FREE_BYTES_TO_RUN = 200 * 1000 * 1000
DEFAULT_PORT = 8765

NETWORK_FILE_SYSTEMS = {
    "nfs", "nfs4", "cifs", "smb3", "smbfs", "afs", "ceph", "lustre", "glusterfs", "fuse.sshfs",
    "fuse.glusterfs", "fuse.s3fs", "fuse.rclone", "beegfs", "gpfs",
}  # fmt: skip

VERSIONED_POSTGRESQL = ("/usr/lib/postgresql", "/opt/homebrew/opt", "/usr/local/opt", "/usr/local/pgsql")


def checkout():
    here = os.path.dirname(os.path.abspath(__file__))
    return os.path.dirname(os.path.dirname(os.path.dirname(here)))


def var_folder():
    return os.path.abspath(os.environ.get("RATEWRIGHT_VAR") or os.path.join(checkout(), "var"))


def wrong_python():
    """What is wrong with the Python that runs this, or None."""
    version = sys.version_info[:2]
    if OLDEST_PYTHON <= version < FIRST_PYTHON_TOO_NEW:
        return None
    return (
        "Python {}.{} at {} cannot be used: it has to be {}.{} to {}.{}. Name a suitable one, for instance: "
        "make demo PYTHON=python{}.{}"
    ).format(
        version[0], version[1], sys.executable or "unknown place",
        OLDEST_PYTHON[0], OLDEST_PYTHON[1], FIRST_PYTHON_TOO_NEW[0], FIRST_PYTHON_TOO_NEW[1] - 1,
        OLDEST_PYTHON[0], OLDEST_PYTHON[1] + 1,
    )  # fmt: skip


def missing_venv(folder):
    """A .venv cannot be made although there is none yet."""
    if os.path.exists(os.path.join(folder, ".venv", "bin", "python")):
        return None
    for module in ("venv", "ensurepip"):
        try:
            __import__(module)
        except ImportError:
            return (
                "This Python has no '{}' module, which makes the private environment. "
                "Debian/Ubuntu: apt install python3-venv (or python{}.{}-venv); elsewhere install a complete Python."
            ).format(module, sys.version_info[0], sys.version_info[1])
    return None


def not_writable(folder, purpose):
    """Files cannot be made in a folder, or the folder itself cannot."""
    try:
        os.makedirs(folder, exist_ok=True)
        probe = os.path.join(folder, ".write-test-{}".format(os.getpid()))
        with open(probe, "w") as file:
            file.write("x")
        os.remove(probe)
    except OSError as error:
        return (
            "Cannot write to {} ({}), where {}. Make it writable (chown or chmod), or work in a copy of your own{}."
        ).format(
            folder,
            error.strerror,
            purpose,
            "" if folder == checkout() else "; RATEWRIGHT_VAR=/some/folder puts it elsewhere",
        )
    return None


def disk_full(folder):
    installed = os.path.exists(os.path.join(folder, ".venv", "bin", "python"))
    wanted = FREE_BYTES_TO_RUN if installed else FREE_BYTES_TO_INSTALL
    free = shutil.disk_usage(folder).free
    if free >= wanted:
        return None
    return "Only {:.0f} MB are free on the disk of {}; {:.0f} MB are needed. Free some space.".format(
        free / 1e6, folder, wanted / 1e6
    )


def wrong_port(text):
    """The port is no port, is reserved, or somebody listens there."""
    import socket

    port = int(text) if text.isdigit() else 0
    if not 1024 <= port <= 65535:
        return "PORT={} is not a port that can be used: give a number from 1024 to 65535.".format(text)
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(("127.0.0.1", port))
        except OSError:
            other = port + 1 if port < 65535 else port - 1
            return "Port {} is taken by another program. Choose another one: make demo PORT={}".format(port, other)
    return None


def already_running(var):
    """Another supervisor holds this folder; asked first, for it also explains a busy port."""
    import fcntl

    path = os.path.join(var, "supervisor.lock")
    try:
        with open(path, "r+") as file:
            holder = file.read().strip()
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                if holder.isdigit() and alive(int(holder)):
                    return "Ratewright already runs from {} as process {}. Use that one, or stop it: kill {}".format(
                        var, holder, holder
                    )
    except OSError:
        return None
    return None


def alive(pid):
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True


def file_system_of(folder, mounts="/proc/mounts"):
    """Kind of the file system that holds a folder, '' where it cannot be known."""
    best, kind = "", ""
    folder = os.path.realpath(folder)
    try:
        with open(mounts) as lines:
            for line in lines:
                words = line.split()
                if len(words) < 3:
                    continue
                point = words[1].replace("\\040", " ").rstrip("/")
                if (folder == point or folder.startswith(point + "/")) and len(point) >= len(best):
                    best, kind = point, words[2]
    except OSError:
        return ""
    return kind


def unfit_sqlite(var):
    """SQLite is missing or too old, or this disk cannot hold its database safely."""
    try:
        import sqlite3
    except ImportError:
        return (
            "This Python has no 'sqlite3' module. Debian/Ubuntu: apt install libsqlite3-0; "
            "for a Python you built yourself: install libsqlite3-dev and build it again."
        )
    if sqlite3.sqlite_version_info < OLDEST_SQLITE:
        return "SQLite {} is too old: {} or newer is needed. A newer Python brings one.".format(
            sqlite3.sqlite_version, ".".join(str(part) for part in OLDEST_SQLITE)
        )
    elsewhere = "Put the data on a local disk: RATEWRIGHT_VAR=/local/folder make demo"
    kind = file_system_of(var)
    if kind in NETWORK_FILE_SYSTEMS:
        return "{} lies on a network file system ({}), where SQLite can lose data. {}".format(var, kind, elsewhere)
    path = os.path.join(var, ".wal-test-{}.sqlite3".format(os.getpid()))
    try:
        connection = sqlite3.connect(path)
        try:
            mode = connection.execute("PRAGMA journal_mode=WAL").fetchone()[0]
            connection.execute("CREATE TABLE probe (value INTEGER)")
            connection.commit()
        finally:
            connection.close()
        if mode != "wal":
            return "SQLite cannot keep a write-ahead log in {}. {}".format(var, elsewhere)
    except sqlite3.Error as error:
        return "SQLite cannot keep a database in {} ({}). {}".format(var, error, elsewhere)
    finally:
        for suffix in ("", "-wal", "-shm"):
            if os.path.exists(path + suffix):
                os.remove(path + suffix)
    return None


def wheels_bring_servers():
    """Whether the locked wheels hold a Valkey and a PostgreSQL for this kind of machine."""
    import platform

    if sys.platform == "darwin":
        return True
    return (
        sys.platform.startswith("linux")
        and platform.machine() in ("x86_64", "aarch64")
        and platform.libc_ver()[0] == "glibc"
    )


def missing_queue_server():
    if wheels_bring_servers() or shutil.which("valkey-server") or shutil.which("redis-server"):
        return None
    return (
        "No Valkey or Redis server, and the bundled one does not fit this kind of machine. Debian/Ubuntu: "
        "apt install redis-server; Fedora: dnf install valkey; Alpine: apk add valkey."
    )


def missing_postgresql():
    if wheels_bring_servers() or shutil.which("initdb"):
        return None
    for folder in VERSIONED_POSTGRESQL:
        for _, _, files in os.walk(folder):
            if "initdb" in files:
                return None
    return (
        "No PostgreSQL server, and the bundled one does not fit this kind of machine. Debian/Ubuntu: "
        "apt install postgresql; Fedora: dnf install postgresql-server; Alpine: apk add postgresql."
    )


def problems(purpose):
    """Everything that stands in the way of 'demo' (or 'serve') or 'test', a line each."""
    python = wrong_python()
    if python:
        return [python]  # the rest would be about a Python that is not going to be used
    folder, var = checkout(), var_folder()
    found = [missing_venv(folder), not_writable(folder, "the programs are installed"), disk_full(folder)]
    found.append(missing_queue_server())
    if purpose == "test":
        found.append(missing_postgresql())
    else:
        unwritable = not_writable(var, "the data are kept")
        found.append(unwritable)
        if not unwritable:
            found.append(unfit_sqlite(var))
        found.append(already_running(var) or wrong_port(os.environ.get("PORT") or str(DEFAULT_PORT)))
    return [line for line in found if line]


def main(arguments):
    purpose = arguments[0] if arguments else "demo"
    if purpose not in ("demo", "serve", "test"):
        sys.stderr.write("usage: preflight.py [demo|serve|test]\n")
        return 2
    lines = problems(purpose)
    for line in lines:
        sys.stderr.write("* " + line + "\n")
    return 1 if lines else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
