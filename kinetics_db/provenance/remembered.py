"""What was made from the record, kept in this process until anything is written.

Every write ends with an entry in the audit chain, in its own transaction. So what was made from audited rows is
still right as long as the head of the chain is the one that was read before it was made.
"""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable, Hashable
from typing import Generic, TypeVar

T = TypeVar("T")


class Remembered(Generic[T]):
    """Values by key, each with the head of the record; the ``most`` that were used last are kept.

    Only for what audited rows alone decide: nothing of jobs, sessions or the time of day.
    """

    def __init__(self, most: int):
        self._most = most
        self._kept: OrderedDict[Hashable, tuple[str, T]] = OrderedDict()
        self._lock = threading.Lock()

    def get(self, key: Hashable, *, head: str, make: Callable[[], T]) -> T:
        """The value that was made under this head, else what ``make`` gives now.

        ``head`` is read before whatever ``make`` reads (`selectors.head_of_record`); empty is never remembered.
        """
        with self._lock:
            known = self._kept.get(key)
            if known is not None and known[0] == head:
                self._kept.move_to_end(key)
                return known[1]
        made = make()
        if head:
            with self._lock:
                self._kept[key] = (head, made)
                self._kept.move_to_end(key)
                while len(self._kept) > self._most:
                    self._kept.popitem(last=False)
        return made
