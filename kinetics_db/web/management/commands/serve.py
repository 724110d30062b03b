"""`manage.py serve`: everything one machine needs, until Ctrl-C. `make serve` prepares and calls it."""

from __future__ import annotations

from argparse import ArgumentParser
from contextlib import suppress
from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError
from django.db import connection

from kinetics_db.accounts.services import ensure_user
from kinetics_db.config.processes.last_words import only_first_sentence
from kinetics_db.config.processes.local import DEFAULT_PORT, LocalInstallation, keep_secret
from kinetics_db.config.processes.supervisor import interruptible
from kinetics_db.errors import RatewrightError

FIRST_USERNAME = "admin"
PASSWORD_LINE = "password: "  # noqa: S105 - what stands before it in the file


class Command(BaseCommand):
    help = "Run database, queue, worker, sweeper and web server on this machine until Ctrl-C."
    requires_system_checks = ()

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("--port", type=int, default=DEFAULT_PORT, help="port on 127.0.0.1 (%(default)s)")
        parser.add_argument("--workers", type=int, default=None, help="worker processes (one per core)")

    def handle(self, *args: Any, **options: Any) -> None:
        self.stderr.style_func = only_first_sentence(self.style.ERROR)
        if settings.SETTINGS_MODULE != "kinetics_db.config.settings.local":
            raise CommandError(
                "serve runs the installation on one machine, "
                "whose settings are kinetics_db.config.settings.local, "
                f"not {settings.SETTINGS_MODULE}: unset DJANGO_SETTINGS_MODULE"
            )
        installation = LocalInstallation(
            checkout=settings.BASE_DIR,
            var=settings.VAR_DIR,
            port=options["port"],
            concurrency=options["workers"],
            start_again="make serve",
            say=self._say,
        )
        try:
            with interruptible():
                installation.start()
                self._say("")
                self._say(f"Ratewright is running at {installation.url}")
                self._say(account_line(installation))
                self._say("Stop it with Ctrl-C.")
                installation.wait()
        except KeyboardInterrupt:
            self._say("Stopping ...")
            installation.stop()
            self._say("Stopped; nothing is left running.")
        except RatewrightError as error:
            installation.stop()
            raise CommandError(str(error)) from error
        finally:
            installation.stop()

    def _say(self, line: str) -> None:
        with suppress(OSError):  # a terminal that has been closed must not keep it from stopping
            self.stdout.write(line)
            self.stdout.flush()


def account_line(installation: LocalInstallation) -> str:
    """Make the first account if there is none yet, and say how to log in."""
    user, password = ensure_user(username=FIRST_USERNAME)
    file = installation.first_account_file
    kept = kept_password(file) if password is None else ""
    still_fits = bool(kept) and user.check_password(kept)
    # The supervisor waits for hours from here on and must not keep the database open.
    connection.close()
    if password is not None:
        keep_secret(file, f"name: {user.username}\n{PASSWORD_LINE}{password}\n")
        return f"Log in as {user.username} with the password {password} (kept in {file})."
    if still_fits:
        return f"Log in as {user.username}; the first password is in {file}."
    how = f".venv/bin/python manage.py changepassword {user.username}"
    return f"Log in as {user.username}; if you forgot the password, set another one: {how}"


def kept_password(file: Path) -> str:
    """The password in the file of the first account, '' if there is none."""
    try:
        lines = file.read_text().splitlines()
    except OSError:
        return ""
    return next((line[len(PASSWORD_LINE) :] for line in lines if line.startswith(PASSWORD_LINE)), "")
