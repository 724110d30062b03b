"""A lab's servers: PostgreSQL, Redis and workers on as many hosts as wanted; everything from the environment."""

import os

from kinetics_db.config.settings.base import *  # noqa: F403
from kinetics_db.config.settings.base import postgresql_from_url


def required(name: str) -> str:
    """The variable's value, or a sentence that says which one is missing."""
    value = os.environ.get(name)
    if not value:
        raise RuntimeError(f"set {name}: a lab installation takes it from the environment")
    return value


DEBUG = False
SECRET_KEY = required("RATEWRIGHT_SECRET_KEY")
ALLOWED_HOSTS = [host.strip() for host in required("RATEWRIGHT_HOSTS").split(",")]
DATABASES = {
    "default": postgresql_from_url(
        required("RATEWRIGHT_DATABASE_URL"), pool=os.environ.get("RATEWRIGHT_ROLE", "web") == "web"
    )
}
BROKER_URL = required("RATEWRIGHT_BROKER_URL")

BEHIND_TLS = os.environ.get("RATEWRIGHT_TLS", "1") == "1"
SESSION_COOKIE_SECURE = CSRF_COOKIE_SECURE = BEHIND_TLS
SECURE_HSTS_SECONDS = 31_536_000 if BEHIND_TLS else 0
SECURE_PROXY_SSL_HEADER = ("HTTP_X_FORWARDED_PROTO", "https") if BEHIND_TLS else None
CSRF_TRUSTED_ORIGINS = [f"https://{host}" for host in ALLOWED_HOSTS] if BEHIND_TLS else []
