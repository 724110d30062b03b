"""One sweep, as Celery's beat and `manage.py sweep` do it."""

from __future__ import annotations

import logging

from django.db import Error as DatabaseError
from django.db import connection

from kinetics_db.config.health import note_sweep
from kinetics_db.jobs import services as jobs

log = logging.getLogger(__name__)


def sweep_once() -> None:
    """Take jobs back from lost workers and ring unheard bells; a database that is away is tried again next time."""
    try:
        swept = jobs.sweep()
    except DatabaseError as error:
        log.warning("the database does not answer: %s", error)
        connection.close()
        return
    note_sweep()
    if swept.lost or swept.crashed or swept.rung:
        log.info("taken back %d, given up %d, rung again %d", swept.lost, swept.crashed, swept.rung)
