"""Makes sure that nothing stays running when the process that started it is gone.

A guard is a tiny separate process which reads a pipe. Only the owner holds the writing end, so the pipe
ends when the owner does, also by ``kill -9``; the guard then stops every child it was told of. It needs
nothing but pipes and process groups and so works on Linux and macOS alike.

Each child is launched through this file: it tells the guard its process id *before* it becomes the wanted
program, so there is no moment in which a child runs that the guard does not know.

The two roles, ``watch`` and ``launch``, run in a bare interpreter (``python -I -S``): standard library only.
"""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import IO

GRACE_SECONDS = 5.0
"""How long a child whose owner is gone may take to stop before its whole group is killed."""


class Guard:
    """The owner's end: start children through it, tell it which ones have been stopped.

    Parameters
    ----------
    keep_open : sequence of int
        File descriptors that the guard holds until it ends, such as a lock which must outlive the owner
        until the last child is gone.
    """

    def __init__(self, *, keep_open: Sequence[int] = ()):
        reading, self._pipe = os.pipe()
        try:
            self._process = subprocess.Popen(  # noqa: S603
                [*_bare_python(), "watch", str(reading)],
                pass_fds=(reading, *keep_open),
                stdin=subprocess.DEVNULL,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
                cwd="/",
                start_new_session=True,
            )
        finally:
            os.close(reading)

    @property
    def pid(self) -> int:
        return self._process.pid

    def is_alive(self) -> bool:
        return self._process.poll() is None

    def start(
        self,
        command: Sequence[str],
        *,
        output: IO[bytes] | int,
        environment: Mapping[str, str] | None = None,
        folder: Path | None = None,
        stop_signal: int = signal.SIGTERM,
        user: tuple[int, int] | None = None,
    ) -> subprocess.Popen[bytes]:
        """Start a program in its own process group, as ``user`` (user id, group id) if given.

        The process id of the answer is also the id of its group.
        """
        identity = f"{user[0]}:{user[1]}" if user else "-"
        return subprocess.Popen(  # noqa: S603
            [*_bare_python(), "launch", str(self._pipe), str(int(stop_signal)), identity, *command],
            pass_fds=(self._pipe,),
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
            env=None if environment is None else dict(environment),
            cwd=folder,
            start_new_session=True,
        )

    def forget(self, pid: int) -> None:
        """The child has been stopped and reaped: its number may belong to a stranger from now on."""
        with suppress(BrokenPipeError):
            os.write(self._pipe, f"-{pid}\n".encode())

    def remove_when_orphaned(self, folder: Path) -> None:
        """Remove a folder of throw-away files should the owner go without having closed this guard."""
        os.write(self._pipe, b"f" + os.fsencode(folder) + b"\n")

    def close(self) -> None:
        """End the guard; children that it still knows are stopped by it."""
        if self._pipe >= 0:
            with suppress(BrokenPipeError):
                os.write(self._pipe, b"k\n")
            os.close(self._pipe)
            self._pipe = -1
        self._process.wait()


def _bare_python() -> list[str]:
    return [sys.executable, "-I", "-S", str(Path(__file__).resolve())]


def is_running(pid: int) -> bool:
    """Whether a process exists and is more than a zombie waiting to be collected."""
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    try:
        return not _has_ended(_fields_of(Path(f"/proc/{pid}/stat")))
    except OSError:
        return not Path("/proc/self/stat").exists()  # gone meanwhile, or a system without /proc


def group_is_running(group: int) -> bool:
    """Whether any process of a process group still runs (a zombie does not)."""
    try:
        os.killpg(group, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    if not Path("/proc/self/stat").exists():
        return True
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                fields = _fields_of(entry / "stat")
            except OSError:
                continue
            if int(fields[2]) == group and not _has_ended(fields):
                return True
    return False


def _fields_of(stat: Path) -> list[bytes]:
    """The fields of /proc/PID/stat from the state on; before it stands a name which may hold anything."""
    return stat.read_bytes().rpartition(b")")[2].split()


def _has_ended(fields: list[bytes]) -> bool:
    """A zombie whose threads are gone too: until then it can still hold a port open."""
    number_of_threads = int(fields[17])
    return fields[0] in (b"Z", b"X") and number_of_threads <= 1


def kill_group(group: int) -> None:
    """Kill every process of a group; it is no error if none is left."""
    with suppress(ProcessLookupError, PermissionError):
        os.killpg(group, signal.SIGKILL)


def _watch(reading: int) -> int:
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    children: dict[int, int] = {}
    folders: list[bytes] = []
    with os.fdopen(reading, "rb") as lines:
        for line in lines:
            kind, rest = line[:1], line[1:].rstrip(b"\n")
            if kind == b"+":  # a child starts: its process id and how to stop it
                words = rest.split()
                children[int(words[0])] = int(words[1])
            elif kind == b"-":  # a child has been stopped
                children.pop(int(rest), None)
            elif kind == b"f":  # a folder to remove
                folders.append(rest)
            elif kind == b"k":  # closed in order: folders are the owner's business
                folders.clear()
    for pid, stop in reversed(children.items()):
        with suppress(ProcessLookupError):
            os.kill(pid, stop)
        deadline = time.monotonic() + GRACE_SECONDS
        while is_running(pid) and time.monotonic() < deadline:
            time.sleep(0.02)
        kill_group(pid)
    for folder in folders:
        shutil.rmtree(os.fsdecode(folder), ignore_errors=True)
    return 0


def _launch(pipe: int, stop_signal: str, identity: str, command: list[str]) -> int:
    os.write(pipe, f"+{os.getpid()} {stop_signal}\n".encode())
    os.close(pipe)
    # Python ignores these two for itself, and what is ignored stays ignored in the program it becomes.
    signal.signal(signal.SIGPIPE, signal.SIG_DFL)
    signal.signal(signal.SIGXFSZ, signal.SIG_DFL)
    if identity != "-":
        user, _, group = identity.partition(":")
        os.setgroups([int(group)])
        os.setgid(int(group))
        os.setuid(int(user))
    try:
        os.execvp(command[0], command)  # noqa: S606
    except OSError as error:
        sys.stderr.write(f"cannot start {command[0]}: {error.strerror}\n")
        return 127


if __name__ == "__main__":
    if sys.argv[1] == "watch":
        sys.exit(_watch(int(sys.argv[2])))
    sys.exit(_launch(int(sys.argv[2]), sys.argv[3], sys.argv[4], sys.argv[5:]))
