"""`manage.py demo`: the whole job on an invented project. `make demo` prepares and calls it."""

from __future__ import annotations

import secrets
import time
from argparse import ArgumentParser
from pathlib import Path
from typing import TYPE_CHECKING, Any

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError
from django.db import connection

from kinetics_db.accounts.services import ensure_user, set_password
from kinetics_db.config.processes.local import DEFAULT_PORT, LocalInstallation, keep_secret
from kinetics_db.config.processes.supervisor import interruptible
from kinetics_db.demo.invented.loading import ask_for_fits
from kinetics_db.demo.progress import follow, try_again
from kinetics_db.demo.report import report_of
from kinetics_db.demo.tern import load_tern
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.errors import RatewrightError
from kinetics_db.fits.selectors import fit_by_id, result_of

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

LOCAL_SETTINGS = "kinetics_db.config.settings.local"
USERNAME = "demo"


class Command(BaseCommand):
    help = "Load an invented project, fit three rival mechanisms to it in the background, show the evidence, serve."
    requires_system_checks = []

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("--port", type=int, default=DEFAULT_PORT, help="port on 127.0.0.1 (%(default)s)")
        parser.add_argument(
            "--once",
            action="store_true",
            help="end after the evidence grid; status 0 only if every fit converged",
        )

    def handle(self, *args: Any, **options: Any) -> None:
        if settings.SETTINGS_MODULE != LOCAL_SETTINGS:
            raise CommandError(
                f"demo runs the installation on one machine, whose settings are {LOCAL_SETTINGS}, "
                f"not {settings.SETTINGS_MODULE}: unset DJANGO_SETTINGS_MODULE"
            )
        self._begun = time.monotonic()
        self._once = bool(options["once"])
        installation = LocalInstallation(
            checkout=settings.BASE_DIR, var=settings.VAR_DIR, port=options["port"], say=self._stage
        )
        try:
            with interruptible():
                installation.start()
                unconverged = self._demonstrate(installation)
                if not options["once"]:
                    self.stdout.write("Stop it with Ctrl-C.")
                    self.stdout.flush()
                    connection.close()  # this process only watches from here on
                    installation.wait()
        except KeyboardInterrupt:
            self._stage("stopping ...")
            installation.stop()
            self._stage("stopped; nothing is left running")
            if options["once"]:
                raise CommandError("interrupted before the end") from None
            return
        except RatewrightError as error:
            installation.stop()
            raise CommandError(str(error)) from error
        finally:
            installation.stop()
        if unconverged:
            raise CommandError(f"not every fit converged: {', '.join(unconverged)}")

    def _demonstrate(self, installation: LocalInstallation) -> list[str]:
        """From files to the grid; answers the fits that did not converge."""
        # This process talks to the queue that it has just started.
        settings.BROKER_URL = installation.environment["RATEWRIGHT_BROKER_URL"]
        user, password = account(settings.VAR_DIR / "demo-password.txt")
        loaded = load_tern(user=user, say=self._stage)
        fits = ask_for_fits(PLAN, loaded, user=user)
        try_again(fits, user=user)
        self._stage(f"{len(fits)} fits asked for")
        follow(fits, check=installation.check, say=self._stage)
        self.stdout.write("\n" + report_of(user=user, project=loaded.project))
        self._stage("done")
        unconverged = []
        for fit in fits:
            result = result_of(fit_by_id(user=user, fit_id=fit.pk))
            if result is None or result.status != "converged":
                unconverged.append(str(fit.mechanism_version))
        where = (
            "To look at it in the browser: make demo, then" if self._once else "Look at it in the browser:"
        )
        self.stdout.write(f"\n{where}\n{installation.url}\n  user      {USERNAME}\n  password  {password}")
        self.stdout.write(f"  (kept in {settings.VAR_DIR / 'demo-password.txt'})")
        self.stdout.flush()
        return unconverged

    def _stage(self, line: str) -> None:
        """A line with the time since the start, '12 s  24 files read'."""
        self.stdout.write(f"{time.monotonic() - self._begun:4.0f} s  {line}" if line else "")
        self.stdout.flush()


def account(password_file: Path) -> tuple[User, str]:
    """The demonstration's account and its password, which the file keeps from one start to the next.

    An account whose file is lost or no longer fits gets a new password.
    """
    user, password = ensure_user(username=USERNAME)
    if password is None:
        kept = password_file.read_text().strip() if password_file.exists() else ""
        if kept and user.check_password(kept):
            return user, kept
        password = secrets.token_urlsafe(12)
        user = set_password(username=USERNAME, password=password)
    keep_secret(password_file, password + "\n")
    return user, password
