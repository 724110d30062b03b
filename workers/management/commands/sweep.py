"""`manage.py sweep`: keep taking jobs back from lost workers and ringing unheard bells."""

from __future__ import annotations

import logging
import signal
import threading
from argparse import ArgumentParser
from types import FrameType
from typing import Any

from django.core.management.base import BaseCommand
from django.db import Error as DatabaseError
from django.db import close_old_connections, connection

from kinetics_db.jobs.services import sweep

log = logging.getLogger(__name__)


class Command(BaseCommand):
    help = "Take background work back from lost workers, and send again what no worker heard of."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument(
            "--every", type=float, default=2.0, metavar="SECONDS", help="pause between sweeps"
        )
        parser.add_argument("--once", action="store_true", help="sweep once and end")

    def handle(self, *args: Any, **options: Any) -> None:
        ended = threading.Event()

        def end(_signal: int, _frame: FrameType | None) -> None:
            ended.set()

        signal.signal(signal.SIGTERM, end)
        signal.signal(signal.SIGINT, end)
        while True:
            try:
                swept = sweep()
            except DatabaseError as error:
                log.warning("the database does not answer: %s", error)
                connection.close()
            else:
                if swept.lost or swept.crashed or swept.rung:
                    log.info(
                        "taken back %d, given up %d, rung again %d", swept.lost, swept.crashed, swept.rung
                    )
            if options["once"] or ended.wait(options["every"]):
                return
            close_old_connections()
