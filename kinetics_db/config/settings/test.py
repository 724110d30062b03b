"""The suite: a lab's settings on a throw-away PostgreSQL, or SQLite where RATEWRIGHT_TEST_DB=sqlite."""

import os
import tempfile
from pathlib import Path

os.environ.setdefault("RATEWRIGHT_SECRET_KEY", "only-for-tests-" + "x" * 40)
os.environ.setdefault("RATEWRIGHT_HOSTS", "testserver,127.0.0.1,localhost")
os.environ.setdefault("RATEWRIGHT_TLS", "0")
os.environ.setdefault("RATEWRIGHT_ROLE", "worker")
os.environ.setdefault("RATEWRIGHT_API_REQUESTS_A_MINUTE", "1000000")
os.environ.setdefault("RATEWRIGHT_API_ANONYMOUS_A_MINUTE", "1000000")
os.environ.setdefault("RATEWRIGHT_DATABASE_URL", "postgresql:///ratewright")
os.environ.setdefault("RATEWRIGHT_BROKER_URL", "redis+socket:///nowhere")
if "RATEWRIGHT_VAR" not in os.environ:
    os.environ["RATEWRIGHT_VAR"] = tempfile.mkdtemp(prefix="rw-test-")

from kinetics_db.config.settings.base import CACHES as CACHES_OF_A_PROCESS
from kinetics_db.config.settings.base import VAR_DIR, sqlite_at
from kinetics_db.config.settings.lab import *  # noqa: F403
from kinetics_db.config.settings.lab import CACHES, DATABASES, SESSION_CACHE_ALIAS

if "RATEWRIGHT_CACHE_URL" not in os.environ:  # the tests that are about the shared one name it
    CACHES = CACHES_OF_A_PROCESS
    SESSION_CACHE_ALIAS = "default"

ON_SQLITE = os.environ.get("RATEWRIGHT_TEST_DB") == "sqlite"
if ON_SQLITE:
    path = Path(os.environ.get("RATEWRIGHT_SQLITE_FILE", VAR_DIR / "test.sqlite3"))
    DATABASES = {"default": sqlite_at(path)}
    # A file, not memory, so that worker processes of the suite see the same database.
    DATABASES["default"]["TEST"] = {"NAME": path}

PASSWORD_HASHERS = ["django.contrib.auth.hashers.MD5PasswordHasher"]  # speed; nothing here is secret
