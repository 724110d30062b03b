"""At most so many failed logins for an account from an address.

Counts are kept in Django's cache. The default cache lives in the process: enough for the one web process of
a machine, and with several processes the limit holds for each of them; a shared cache in the settings makes it
one limit for all. Behind a proxy that hides addresses every visitor counts as one address.
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
        return cache.incr(key) <= MOST_FAILURES
    except ValueError:  # the window ended between the two calls
        cache.add(key, 1, timeout=WINDOW_SECONDS)
        return True


def forget(*, account: str, address: str) -> None:
    """A login succeeded: its tries no longer count."""
    cache.delete(_key(account, address))


def _key(account: str, address: str) -> str:
    # Hashed, since both are typed by strangers: any length, any characters.
    spelled = unicodedata.normalize("NFKC", account).casefold().strip()
    return "login-" + hashlib.sha256(f"{spelled}\0{address}".encode(errors="replace")).hexdigest()
