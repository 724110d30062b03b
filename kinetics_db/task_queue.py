"""The names of background tasks, and the one way to ring a worker's bell.

Messages carry ids only. A lost message loses nothing: the sweep sends it again from the job's row.
"""

from __future__ import annotations

import logging
from collections.abc import Callable

from django.db import transaction

from kinetics_db.config.celery import configure

log = logging.getLogger(__name__)

RUN_JOB = "ratewright.run_job"
SWEEP_JOBS = "ratewright.sweep_jobs"
TASK_NAMES = frozenset({RUN_JOB, SWEEP_JOBS})


def send(name: str, record_id: int) -> bool:
    """Send a task's message now; False (and a log line) when the broker does not answer."""
    if name not in TASK_NAMES:
        raise KeyError(f"unknown task {name}")
    try:
        configure().signature(name, args=[record_id]).apply_async(ignore_result=True, retry=False)
    except Exception as error:  # every transport raises its own family here
        log.warning("broker did not take %s(%s): %s; the sweep will send it again", name, record_id, error)
        return False
    return True


def enqueue_on_commit(name: str, record_id: int, after_sent: Callable[[], None] | None = None) -> None:
    """Send a task once the surrounding transaction has committed."""

    def ring() -> None:
        if send(name, record_id) and after_sent is not None:
            after_sent()

    # robust: what is committed is committed, whatever becomes of its message; the sweep sends it again
    transaction.on_commit(ring, robust=True)
