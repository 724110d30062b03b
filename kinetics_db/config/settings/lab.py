"""A lab's servers: PostgreSQL, Redis and workers on as many hosts as wanted; everything from the environment."""

import os

from kinetics_db.config.caches import shared_caches
from kinetics_db.config.environment import cache_url, cache_url_beside, choice, hosts, required
from kinetics_db.config.settings.base import *  # noqa: F403
from kinetics_db.config.settings.base import postgresql_from_url

DEBUG = False
SECRET_KEY = required("RATEWRIGHT_SECRET_KEY")
HOSTS = hosts(required("RATEWRIGHT_HOSTS"))
ALLOWED_HOSTS = [host.name for host in HOSTS]
ROLE = choice("RATEWRIGHT_ROLE", "web", ("web", "worker"))
DATABASES = {"default": postgresql_from_url(required("RATEWRIGHT_DATABASE_URL"), pool=ROLE == "web")}
BROKER_URL = required("RATEWRIGHT_BROKER_URL")

# One count of failed logins and one copy of each session for all web processes.
CACHES = shared_caches(cache_url(os.environ.get("RATEWRIGHT_CACHE_URL") or cache_url_beside(BROKER_URL)))
SESSION_CACHE_ALIAS = "sessions"

BEHIND_TLS = choice("RATEWRIGHT_TLS", "1", ("1", "0")) == "1"
SESSION_COOKIE_SECURE = CSRF_COOKIE_SECURE = BEHIND_TLS
SECURE_SSL_REDIRECT = BEHIND_TLS
SECURE_REDIRECT_EXEMPT = [r"^api/v1/health/$"]  # asked from the same machine, without the proxy
SECURE_PROXY_SSL_HEADER = ("HTTP_X_FORWARDED_PROTO", "https") if BEHIND_TLS else None
SECURE_HSTS_SECONDS = 31_536_000 if BEHIND_TLS else 0
# Other servers below the lab's name, and the browsers' own lists, are not this service's to decide.
SILENCED_SYSTEM_CHECKS = ["security.W005", "security.W021"]
# For a proxy that passes on a host without its port; the same origin needs no entry.
CSRF_TRUSTED_ORIGINS = [host.origin("https" if BEHIND_TLS else "http") for host in HOSTS]
