"""Small programs that stand in for the real children, written in a line or two."""

from __future__ import annotations

import sys
from pathlib import Path

from kinetics_db.config.processes.supervisor import Child

CHECKOUT = Path(__file__).resolve().parents[2]


def child(name: str, code: str, **options: object) -> Child:
    """A child which runs these lines of Python."""
    return Child(name=name, command=[sys.executable, "-S", "-u", "-c", code], **options)  # type: ignore[arg-type]


RUNS_FOR_LONG = "print('running', flush=True); import time; time.sleep(300)"

IGNORES_SIGTERM = (
    "import signal, time\n"
    "signal.signal(signal.SIGTERM, signal.SIG_IGN)\n"
    "print('deaf', flush=True)\n"
    "time.sleep(300)\n"
)

HAS_A_GRANDCHILD = (
    "import subprocess, sys, time\n"
    "grandchild = subprocess.Popen([sys.executable, '-S', '-c', 'import time; time.sleep(300)'])\n"
    "print(grandchild.pid, flush=True)\n"
    "time.sleep(300)\n"
)
