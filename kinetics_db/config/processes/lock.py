"""The lock file that one supervisor at a time holds; it says which process that is, and where it can be reached."""

from __future__ import annotations

import fcntl
import os
import time
from pathlib import Path

from .failures import AlreadyRunning
from .guard import is_running

SECONDS_TO_WAIT = 60.0


def hold(path: Path, *, address: str = "") -> int:
    """Take the lock file, waiting while the children of a killed holder are being stopped.

    Parameters
    ----------
    path : Path
        Holds, a line each, the process id and the address (a URL) of its holder.
    address : str
        What to write there.

    Returns
    -------
    int
        The file descriptor; closing it frees the lock.

    Raises
    ------
    AlreadyRunning
        When a running process holds it; the message gives its process id and address.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o600)
    deadline = time.monotonic() + SECONDS_TO_WAIT
    while True:
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            holder, reached = _written_in(descriptor)
            if (holder and is_running(holder)) or time.monotonic() > deadline:
                os.close(descriptor)
                where = f" at {reached}" if reached else ""
                raise AlreadyRunning(
                    f"Ratewright already runs from {path.parent}{where} as process {holder or 'unknown'}; "
                    f"use that one, or stop it (Ctrl-C where it runs, or: kill {holder or 'PID'})."
                ) from error
            time.sleep(0.1)
            continue
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, f"{os.getpid()}\n{address}\n".encode(), 0)
        return descriptor


def _written_in(descriptor: int) -> tuple[int, str]:
    """Process id (0 if none can be read) and address of the holder."""
    first, _, rest = os.pread(descriptor, 500, 0).decode(errors="replace").partition("\n")
    return (int(first) if first.isdigit() else 0), rest.strip()
