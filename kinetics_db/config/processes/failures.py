"""What can go wrong with a process that somebody else's work depends on."""

from __future__ import annotations

from pathlib import Path

from kinetics_db.errors import Conflict, Unavailable


class ServerMissing(Unavailable):
    """No binary of a server that is needed; the message names the ways to get one."""


class PortBusy(Conflict):
    """Another program listens where the web server should."""


class AlreadyRunning(Conflict):
    """Another supervisor holds the same folder."""


class ChildFailed(Unavailable):
    """A child ended by itself, or did not become ready; holds where to read on."""

    def __init__(self, message: str, *, name: str, log: Path, exit_status: int | None = None):
        super().__init__(message)
        self.name = name
        self.log = log
        self.exit_status = exit_status


class ChildDied(ChildFailed):
    """A child that should run until it is stopped has ended."""


class NotReady(ChildFailed):
    """A child runs but does not answer within its time."""
