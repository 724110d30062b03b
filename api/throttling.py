"""At most so many requests a minute: of a person, and of an address without one.

Counted in Django's cache in steps of a minute, which costs one addition a request: one limit for all web processes
where they share the cache.
"""

from __future__ import annotations

import math
import time
from typing import Any

from django.conf import settings
from django.core.cache import cache
from rest_framework.request import Request
from rest_framework.throttling import BaseThrottle

WINDOW_SECONDS = 60


class RequestsAMinute(BaseThrottle):
    """Counts a request to its person, or to its address."""

    def allow_request(self, request: Request, view: Any) -> bool:
        if request.user.is_authenticated:
            who, most = f"user-{request.user.pk}", settings.API_REQUESTS_A_MINUTE
        else:
            who, most = f"address-{request.META.get('REMOTE_ADDR', '')}", settings.API_ANONYMOUS_A_MINUTE
        return _count(f"api-{who}-{int(time.time() // WINDOW_SECONDS)}") <= most

    def wait(self) -> float:
        """Seconds until the next step begins."""
        return math.ceil(WINDOW_SECONDS - time.time() % WINDOW_SECONDS)


def _count(key: str) -> int:
    cache.add(key, 0, timeout=2 * WINDOW_SECONDS)
    try:
        return cache.incr(key)
    except ValueError:  # thrown out by the cache between the two calls
        return 1
