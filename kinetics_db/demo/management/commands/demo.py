"""`manage.py demo`: the whole job on an invented project. `make demo` prepares and calls it."""

from __future__ import annotations

import os
import secrets
import sys
import time
from argparse import ArgumentParser
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError
from django.db import connection

from kinetics_db.accounts.services import ensure_user, set_password
from kinetics_db.config.processes.last_words import only_first_sentence
from kinetics_db.config.processes.local import DEFAULT_PORT, LocalInstallation, keep_secret
from kinetics_db.config.processes.supervisor import interruptible
from kinetics_db.demo.invented.loading import ask_for_fits, counted
from kinetics_db.demo.progress import follow, still_to_do, try_again
from kinetics_db.demo.report import report_of
from kinetics_db.demo.tern import load_tern
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.errors import RatewrightError
from kinetics_db.fits.selectors import fit_by_id, fits_in, result_of

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.demo.invented.loading import Loaded
    from kinetics_db.fits.models import Fit

LOCAL_SETTINGS = "kinetics_db.config.settings.local"
USERNAME = "demo"
OWN_FOLDER = "var/demo"  # below the project's folder; RATEWRIGHT_VAR names another


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
        self.stderr.style_func = only_first_sentence(self.style.ERROR)
        if settings.SETTINGS_MODULE != LOCAL_SETTINGS:
            raise CommandError(
                f"demo runs the installation on one machine, whose settings are {LOCAL_SETTINGS}, "
                f"not {settings.SETTINGS_MODULE}: unset DJANGO_SETTINGS_MODULE"
            )
        if not os.environ.get("RATEWRIGHT_VAR"):
            # Settings are read already, so only a fresh process can use another folder.
            self.stdout.flush()
            start_in_own_folder(["--port", str(options["port"]), *(["--once"] if options["once"] else [])])
        self._begun = time.monotonic()
        self._once = bool(options["once"])
        installation = LocalInstallation(
            checkout=settings.BASE_DIR,
            var=settings.VAR_DIR,
            port=options["port"],
            start_again="make demo",
            say=self._stage,
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
        known = {fit.pk for fit in fits_in(user=user, project_id=loaded.project.pk)}
        fits = ask_for_fits(PLAN, loaded, user=user)
        try_again(fits, user=user)
        undone = still_to_do(fits, known=known)
        self._stage(what_is_done(PLAN.slug, loaded, fits, undone))
        follow(undone, check=installation.check, say=self._stage)
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
        with suppress(OSError):  # the terminal may be gone; stopping goes on all the same
            self.stdout.write(f"{time.monotonic() - self._begun:4.0f} s  {line}" if line else "")
            self.stdout.flush()


def start_in_own_folder(arguments: Sequence[str]) -> NoReturn:
    """Become the same command with a folder of its own, so that invented data never stand beside one's own."""
    folder = settings.BASE_DIR / OWN_FOLDER
    command = [sys.executable, str(settings.BASE_DIR / "manage.py"), "demo", *arguments]
    os.execve(sys.executable, command, {**os.environ, "RATEWRIGHT_VAR": str(folder)})  # noqa: S606 - no shell needed


def what_is_done(slug: str, loaded: Loaded, fits: Sequence[Fit], undone: Sequence[Fit]) -> str:
    """A line on the fits: how many are computed now, and how many an earlier start has computed."""
    before = len(fits) - len(undone)
    if undone:
        return f"{counted(len(undone), 'fit')} asked for" + (f", {before} computed before" if before else "")
    if loaded.is_new:
        return f"{counted(before, 'fit')} computed before"
    return f"{slug} is here already ({loaded.runs} runs, {before} fits); nothing computed again"


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
