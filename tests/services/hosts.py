"""Hosts of one's own on one machine: name and network apart, disk and unix sockets shared."""

from __future__ import annotations

import os
import subprocess
import sys
from functools import cache

NAME_AND_GO_ON = (
    "import os, socket, sys; socket.sethostname(sys.argv[1]); os.execvp(sys.argv[2], sys.argv[2:])"
)
WITH_A_NAME = (sys.executable, "-S", "-c", NAME_AND_GO_ON)


@cache
def way_to_part() -> tuple[str, ...]:
    """How this system lets us part name and network: as root, as root of one's own, or () for not at all."""
    # Root of one's own owns nothing of the servers that root has started as somebody else.
    own_root = () if os.geteuid() == 0 else ("--user", "--map-root-user")
    for options in (("--net", "--uts"), (*own_root, "--net", "--uts")):
        command = ("unshare", *options)
        try:
            done = subprocess.run(
                [*command, *WITH_A_NAME, "trial", "true"], capture_output=True, check=False, timeout=10
            )
        except OSError:
            return ()
        if done.returncode == 0:
            return command
    return ()


def on_host(name: str) -> list[str]:
    """What to put before a command so that it runs on a host of that name; nothing where that cannot be."""
    return [*way_to_part(), *WITH_A_NAME, name] if way_to_part() else []
