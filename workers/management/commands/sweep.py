"""`manage.py sweep`: keep taking jobs back from lost workers and ringing unheard bells."""

from __future__ import annotations

import signal
import threading
from argparse import ArgumentParser
from types import FrameType
from typing import Any

from django.conf import settings
from django.core.management.base import BaseCommand
from django.db import close_old_connections

from workers.sweeping import sweep_once


class Command(BaseCommand):
    help = "Take background work back from lost workers, and send again what no worker heard of."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument(
            "--every",
            type=float,
            default=settings.JOB_SWEEP_SECONDS,
            metavar="SECONDS",
            help="pause between sweeps",
        )
        parser.add_argument("--once", action="store_true", help="sweep once and end")

    def handle(self, *args: Any, **options: Any) -> None:
        ended = threading.Event()

        def end(_signal: int, _frame: FrameType | None) -> None:
            ended.set()

        signal.signal(signal.SIGTERM, end)
        signal.signal(signal.SIGINT, end)
        while True:
            sweep_once()
            if options["once"] or ended.wait(options["every"]):
                return
            close_old_connections()
