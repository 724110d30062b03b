"""What Celery's beat rings for: the sweep, on a queue of its own so that it never waits behind long work."""

from __future__ import annotations

from typing import Any

from kinetics_db.task_queue import SWEEP_JOBS

SWEEPS = "ratewright-sweeps"
"""The queue of the bell for sweeps; `celery worker --beat --queues ratewright-sweeps` rings and hears it."""

ROUTES = {SWEEP_JOBS: {"queue": SWEEPS}}


def schedule(*, every: float) -> dict[str, dict[str, Any]]:
    """Celery's ``beat_schedule``: the bell for a sweep every so many seconds.

    A sweep finds everything that is due, so one that nobody heard in time is worth nothing: it expires, and
    bells that piled up while nobody listened are thrown away unread.
    """
    return {
        "sweep": {
            "task": SWEEP_JOBS,
            "schedule": every,
            "options": {"expires": max(5.0 * every, 10.0), "ignore_result": True},
        }
    }
