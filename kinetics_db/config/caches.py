"""The cache that the web processes of a lab share, and what becomes of it while Redis does not answer.

The record is in PostgreSQL and needs no cache, so nobody is turned away because Redis is: what it would have
answered is looked up or computed again. Counts of failed logins go on in each process's own memory meanwhile, so
that guessing stays slow (the limit then holds for each process), and people can still log in.
"""

from __future__ import annotations

import logging
import time
from collections.abc import Callable
from typing import Any

import redis
from django.core.cache.backends.base import DEFAULT_TIMEOUT, BaseCache
from django.core.cache.backends.dummy import DummyCache
from django.core.cache.backends.locmem import LocMemCache
from django.core.cache.backends.redis import RedisCache
from redis.backoff import NoBackoff
from redis.retry import Retry

log = logging.getLogger(__name__)

PAUSE_SECONDS = 5.0
"""How long a server that did not answer is not asked again, so that pages stay quick."""

LONGEST_COPY_SECONDS = 300
"""A logout that Redis did not hear of takes effect after so long at the latest."""

CLIENT_OPTIONS = {
    "socket_connect_timeout": 1.0,
    "socket_timeout": 2.0,
    # One more try, for a connection that the server closed while it lay unused.
    "retry": Retry(NoBackoff(), 1),
}


def shared_caches(url: str) -> dict[str, dict[str, Any]]:
    """Django's ``CACHES`` on the Redis database at that address."""
    return {
        alias: {
            "BACKEND": f"{__name__}.{backend.__name__}",
            "LOCATION": [url],  # a list, for a comma in a password would part a text
            "KEY_PREFIX": f"ratewright-{alias}",
            "OPTIONS": CLIENT_OPTIONS,
        }
        for alias, backend in (("default", SharedCache), ("sessions", SessionCopies))
    }


class SharedCache(RedisCache):
    """Redis, or this process's own memory while Redis does not answer."""

    def __init__(self, server: Any, params: dict[str, Any]):
        super().__init__(server, params)
        self._instead: BaseCache = self._make_instead()
        self._ask_again = 0.0

    def _make_instead(self) -> BaseCache:
        return LocMemCache("while-redis-is-away", {"OPTIONS": {"MAX_ENTRIES": 10_000}})

    def _answer(self, name: str, ask: Callable[..., Any], *args: Any, **kwargs: Any) -> Any:
        if time.monotonic() >= self._ask_again:
            try:
                return ask(*args, **kwargs)
            except redis.RedisError as error:
                self._ask_again = time.monotonic() + PAUSE_SECONDS
                log.warning("the shared cache does not answer: %s", error)
        return getattr(self._instead, name)(*args, **kwargs)

    def add(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("add", super().add, *args, **kwargs)

    def get(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("get", super().get, *args, **kwargs)

    def set(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("set", super().set, *args, **kwargs)

    def touch(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("touch", super().touch, *args, **kwargs)

    def delete(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("delete", super().delete, *args, **kwargs)

    def incr(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("incr", super().incr, *args, **kwargs)

    def has_key(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("has_key", super().has_key, *args, **kwargs)

    def get_many(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("get_many", super().get_many, *args, **kwargs)

    def set_many(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("set_many", super().set_many, *args, **kwargs)

    def delete_many(self, *args: Any, **kwargs: Any) -> Any:
        return self._answer("delete_many", super().delete_many, *args, **kwargs)

    def clear(self) -> Any:
        return self._answer("clear", super().clear)


class SessionCopies(SharedCache):
    """Copies of the sessions in the database, and none while Redis does not answer.

    Never this process's own memory: a logout in another process would not reach it.
    """

    def _make_instead(self) -> BaseCache:
        return DummyCache("", {})

    def get_backend_timeout(self, timeout: Any = DEFAULT_TIMEOUT) -> int:
        wanted = super().get_backend_timeout(timeout)
        return LONGEST_COPY_SECONDS if wanted is None else int(min(wanted, LONGEST_COPY_SECONDS))
