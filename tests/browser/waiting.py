"""Waiting for what a browser does."""

from __future__ import annotations

import time
from collections.abc import Callable


def until(holds: Callable[[], bool], *, seconds: float = 10.0) -> None:
    """Wait for a condition; playwright's own waiting for expressions is stopped by the content policy."""
    end = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.02)
