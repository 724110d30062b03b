"""At most so many failed logins for an account from an address.

Counts are kept in Django's cache: in memory for the one web process of a machine, in Redis for the web processes
of a lab, and in each one's memory while Redis does not answer. Behind a proxy that hides addresses every visitor
counts as one address.
"""

from __future__ import annotations

import hashlib
import unicodedata

from django.core.cache import cache

MOST_FAILURES = 10
WINDOW_SECONDS = 15 * 60


def begin_try(*, account: str, address: str) -> bool:
    """Count a try before the password is looked at, so that tries at the same moment cannot slip through.

    False when the account has no try left from this address.
    """
    key = _key(account, address)
    cache.add(key, 0, timeout=WINDOW_SECONDS)
    try:
        tries = cache.incr(key)
    except ValueError:  # the window ended between the two calls
        cache.add(key, 1, timeout=WINDOW_SECONDS)
        return True
    if tries == 1:  # where the window ended within Redis's own two steps, the new count has no end yet
        cache.touch(key, WINDOW_SECONDS)
    return tries <= MOST_FAILURES


def forget(*, account: str, address: str) -> None:
    """A login succeeded: its tries no longer count."""
    cache.delete(_key(account, address))


def _key(account: str, address: str) -> str:
    # Hashed, since both are typed by strangers: any length, any characters.
    spelled = unicodedata.normalize("NFKC", account).casefold().strip()
    return "login-" + hashlib.sha256(f"{spelled}\0{address}".encode(errors="replace")).hexdigest()
