"""One machine: SQLite under var/, a bundled Valkey on a unix socket, one worker, all started by one command."""

import os

from kinetics_db.config.processes.valkey import broker_url
from kinetics_db.config.settings.base import *  # noqa: F403
from kinetics_db.config.settings.base import VAR_DIR, secret_key, sqlite_at

DEBUG = False
SECRET_KEY = secret_key()
ALLOWED_HOSTS = ["127.0.0.1", "localhost", "[::1]"]
DATABASES = {"default": sqlite_at(VAR_DIR / "ratewright.sqlite3")}
# The socket of this folder's own queue, so that a worker started by hand finds it too.
BROKER_URL = os.environ.get("RATEWRIGHT_BROKER_URL") or broker_url(VAR_DIR / "valkey")
SESSION_COOKIE_SAMESITE = "Lax"
