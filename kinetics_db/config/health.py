"""Whether one of a lab's processes does its work: `python -m kinetics_db.config.health web|worker|sweeps`.

Asked by a container or a supervisor every minute, so it loads as little as it can; ends with 0 or 1 and a line.
"""

from __future__ import annotations

import http.client
import os
import socket
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

from kinetics_db.config.environment import WrongEnvironment, hosts, number, required

ADDRESS = "/api/v1/health/"
SECONDS = 5.0
"""How long an answer may take."""
MOST_MISSED = 30
"""Sweeps that may be missed before the sweeper counts as broken, and a minute at least."""


class Unhealthy(Exception):
    """The process does not do its work; the message says what was seen."""


def web() -> str:
    """The web server on this machine answers, and its database does."""
    from kinetics_db.config.gunicorn import bind

    place, _, port = bind.rpartition(":")
    if not port.isdecimal():
        raise WrongEnvironment(f"RATEWRIGHT_BIND is {bind!r}; it takes an address and a port: 127.0.0.1:8000")
    # Any other name would be refused: the address that is asked is no name of the lab's.
    name = hosts(required("RATEWRIGHT_HOSTS"))[0].name.lstrip(".")
    here = "127.0.0.1" if place in ("", "0.0.0.0", "[::]") else place.strip("[]")  # noqa: S104 - compared only
    connection = http.client.HTTPConnection(here, int(port), timeout=SECONDS)
    try:
        connection.request("GET", ADDRESS, headers={"Host": name})
        status = connection.getresponse().status
    except (OSError, http.client.HTTPException) as error:
        raise Unhealthy(f"the web server on port {port} does not answer: {error}") from error
    finally:
        connection.close()
    if status != 200:
        raise Unhealthy(f"{ADDRESS} answers {status}")
    return f"{ADDRESS} answers 200"


def worker() -> str:
    """The worker of this machine (named celery@host, as by itself) answers on the queue."""
    from celery import Celery
    from kombu.exceptions import OperationalError

    name = f"celery@{socket.gethostname()}"
    with Celery("asking", broker=required("RATEWRIGHT_BROKER_URL")) as app:
        app.conf.broker_transport_options = {"socket_connect_timeout": SECONDS, "socket_timeout": SECONDS}
        try:
            answers = app.control.inspect(destination=[name], timeout=SECONDS, limit=1).ping()
        except OperationalError as error:
            raise Unhealthy(f"the queue does not answer: {error}") from error
    if not answers:
        raise Unhealthy(f"{name} does not answer")
    return f"{name} answers"


def sweeps() -> str:
    """The process that sweeps has done so lately."""
    longest = max(60.0, MOST_MISSED * number("RATEWRIGHT_JOB_SWEEP_SECONDS", 2))
    try:
        age = time.time() - swept_file().stat().st_mtime
    except OSError as error:
        raise Unhealthy(f"no sweep was noted: {error}") from error
    if age > longest:
        raise Unhealthy(f"the last sweep was {age:.0f} s ago")
    return f"the last sweep was {age:.0f} s ago"


def swept_file() -> Path:
    """Its time of change is that of this installation's last sweep on this machine."""
    var = os.environ.get("RATEWRIGHT_VAR")
    return Path(var) / "swept" if var else Path(tempfile.gettempdir()) / f"ratewright-swept-{os.getuid()}"


def note_sweep() -> None:
    """Note that a sweep was done; where that cannot be written, sweeping goes on without."""
    with suppress(OSError):
        swept_file().parent.mkdir(parents=True, exist_ok=True)
        swept_file().touch()


ASKED: dict[str, Callable[[], str]] = {"web": web, "worker": worker, "sweeps": sweeps}


def main(arguments: list[str]) -> int:
    """Ask; answers the exit status and writes one line."""
    if len(arguments) != 1 or arguments[0] not in ASKED:
        sys.stderr.write(f"say what to ask: {', '.join(ASKED)}\n")
        return 2
    try:
        said = ASKED[arguments[0]]()
    except (Unhealthy, WrongEnvironment) as error:
        sys.stderr.write(f"{error}\n")
        return 1
    sys.stdout.write(f"{said}\n")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
