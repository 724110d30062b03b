"""Timing that a busy machine does not upset: two things in turn, and the best of a few tries."""

from __future__ import annotations

import gc
import math
import statistics
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field

TRIES = 3
Work = Callable[[], object]


@dataclass
class Times:
    """Seconds that a piece of work took, each time it was done."""

    seconds: list[float] = field(default_factory=list)

    def take(self, work: Work) -> None:
        """Do the work once more."""
        begun = time.perf_counter()
        work()
        self.seconds.append(time.perf_counter() - begun)

    @property
    def median(self) -> float:
        return statistics.median(self.seconds)

    @property
    def p95(self) -> float:
        """95 of 100 were as quick or quicker."""
        return sorted(self.seconds)[math.ceil(0.95 * len(self.seconds)) - 1]

    def __str__(self) -> str:
        return f"median {1e3 * self.median:.1f} ms, p95 {1e3 * self.p95:.1f} ms"


def in_turn(one: Sequence[Work], other: Sequence[Work]) -> tuple[Times, Times]:
    """Both kinds of work in turn, so that whatever else the machine does hits both alike."""
    first, second = Times(), Times()
    with no_collection():
        for a, b in zip(one, other, strict=True):
            first.take(a)
            second.take(b)
    return first, second


def times_slower(one: Sequence[Work], other: Sequence[Work], *, allowed: float) -> float:
    """How many times slower the first kind is, by median and by p95 the worse of the two; the best of some tries.

    Prints what was measured, which pytest shows with -s and of a test that fails.
    """
    best = math.inf
    for _ in range(TRIES):
        first, second = in_turn(one, other)
        ratio = max(first.median / second.median, first.p95 / second.p95)
        print(f"{first} against {second}: {ratio:.2f} times")  # noqa: T201
        best = min(best, ratio)
        if best <= allowed:
            break
    return best


def is_quick(work: Work, *, seconds: float, tries: int = 40) -> bool:
    """Whether the work takes less when nothing else has the processor: so at least once."""

    def taken() -> float:
        begun = time.perf_counter()
        work()
        return time.perf_counter() - begun

    return any(taken() < seconds for _ in range(tries))


@contextmanager
def no_collection() -> Iterator[None]:
    """No pause for garbage inside; the suite has made a lot of it."""
    gc.collect()
    gc.disable()
    try:
        yield
    finally:
        gc.enable()
