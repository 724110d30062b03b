"""One machine: SQLite under var/, a bundled Valkey on a unix socket, one worker, all started by one command."""

from kinetics_db.config.settings.base import *  # noqa: F403
from kinetics_db.config.settings.base import VAR_DIR, os, secret_key, sqlite_at

DEBUG = False
SECRET_KEY = secret_key()
ALLOWED_HOSTS = ["127.0.0.1", "localhost", "[::1]"]
DATABASES = {"default": sqlite_at(VAR_DIR / "ratewright.sqlite3")}
BROKER_URL = os.environ.get("RATEWRIGHT_BROKER_URL", "")
SESSION_COOKIE_SAMESITE = "Lax"
