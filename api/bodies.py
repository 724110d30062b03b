"""Values of a JSON body by name, each mistake collected with its place, so that all are told at once.

Entries of lists count from 1 in places, as for runs: 'portions.2.amount'.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from datetime import datetime
from typing import Any, NamedTuple

from rest_framework.request import Request

from kinetics_db.errors import InvalidInput, Problem

MOST_ITEMS = 1000
_NOTHING = object()


class Quantity(NamedTuple):
    """A number as it was sent, with its unit and standard uncertainty."""

    value: float
    unit: str
    uncertainty: float = 0.0


class Body:
    """Reads an object name by name; `done` raises InvalidInput with every problem, unknown names included."""

    def __init__(self, values: Mapping[str, Any], *, where: str = "", problems: list[Problem] | None = None):
        self.values, self.where = values, where
        self.problems: list[Problem] = [] if problems is None else problems
        self.inner: list[Body] = []
        self.known: set[str] = set()

    @classmethod
    def of(cls, request: Request) -> Body:
        """The body of a request; a request without one has an empty one."""
        data = request.data
        return cls(data if isinstance(data, Mapping) else {})

    def text(self, name: str, default: str = "", *, required: bool = False) -> str:
        """A text; its length and characters are the services' matter."""
        return str(self._of_type(name, str, "a text", default, required))

    def truth(self, name: str, default: bool = False) -> bool:
        """True or false."""
        return bool(self._of_type(name, bool, "true or false", default, False))

    def whole(self, name: str, *, required: bool = False) -> int | None:
        """A whole number."""
        value = self._take(name, required)
        if value is _NOTHING or value is None or not self._is_whole(name, value):
            return None
        return int(value)

    def number(self, name: str, default: float | None = None, *, required: bool = False) -> float | None:
        """A finite number."""
        value = self._take(name, required)
        if value is _NOTHING or value is None:
            return default
        return float(value) if self._is_number(name, value) else default

    def quantity(self, name: str, *, required: bool = False, uncertain: bool = False) -> Quantity | None:
        """``{"value": number, "unit": text}``, with ``uncertain`` also a standard "uncertainty" in that unit."""
        part = self.part(name, required=required)
        if part is None:
            return None
        value, unit = part.number("value", required=True), part.text("unit", required=True)
        uncertainty = part.number("uncertainty", 0.0) if uncertain else 0.0
        return None if value is None else Quantity(value, unit, uncertainty or 0.0)

    def time(self, name: str, *, required: bool = False) -> datetime | None:
        """A time with its zone (RFC 3339)."""
        before = len(self.problems)
        text = self.text(name, required=required)
        if len(self.problems) > before or (not text and not required):
            return None
        try:
            found = datetime.fromisoformat(text)
        except ValueError:
            found = None
        if found is None or found.tzinfo is None:
            self._wrong(name, f"{text!r:.40} is no time with its zone", "such as 2026-03-31T12:00:00Z")
            return None
        return found

    def texts(self, name: str) -> list[str]:
        """A list of texts."""
        return [v for i, v in enumerate(self._list(name), start=1) if self._is_text(f"{name}.{i}", v)]

    def numbers(self, name: str, *, most: int = MOST_ITEMS) -> list[float]:
        """A list of finite numbers."""
        entries = enumerate(self._list(name, most), start=1)
        return [float(v) for i, v in entries if self._is_number(f"{name}.{i}", v)]

    def wholes(self, name: str, *, most: int = MOST_ITEMS) -> list[int]:
        """A list of whole numbers."""
        return [v for i, v in enumerate(self._list(name, most), start=1) if self._is_whole(f"{name}.{i}", v)]

    def numbers_by_name(self, name: str, *, required: bool = False) -> dict[str, float]:
        """An object whose values are finite numbers."""
        values = self.named(name, required=required)
        return {key: float(v) for key, v in values.items() if self._is_number(f"{name}.{key}"[:200], v)}

    def named(self, name: str, *, required: bool = False) -> Mapping[str, Any]:
        """An object with names of the sender's own."""
        value = self._take(name, required)
        if value is _NOTHING or value is None:
            return {}
        if not isinstance(value, Mapping) or len(value) > MOST_ITEMS:
            self._wrong(name, "not an object" if not isinstance(value, Mapping) else f"{len(value)} entries",
                        f"an object with at most {MOST_ITEMS} entries")  # fmt: skip
            return {}
        return value

    def objects(self, name: str) -> list[Body]:
        """A list of objects, each to be read like this one."""
        found = []
        for i, value in enumerate(self._list(name), start=1):
            if isinstance(value, Mapping):
                found.append(self._inner(f"{name}.{i}", value))
            else:
                self._wrong(f"{name}.{i}", "not an object", "{...}")
        return found

    def part(self, name: str, *, required: bool = False) -> Body | None:
        """An object inside this one, to be read like it."""
        value = self._take(name, required)
        if value is _NOTHING or value is None:
            return None
        if not isinstance(value, Mapping):
            self._wrong(name, "not an object", "{...}")
            return None
        return self._inner(name, value)

    def plain(self, name: str) -> Any:
        """Whatever stands there, for a service that reads it itself; None when nothing does."""
        value = self._take(name, False)
        return None if value is _NOTHING else value

    def done(self) -> None:
        """InvalidInput with everything that was wrong."""
        self._unknown()
        if self.problems:
            raise InvalidInput(self.problems)

    def _unknown(self) -> None:
        cure = ", ".join(sorted(self.known)) or "an empty object"
        for name in self.values:
            if name not in self.known:
                self._wrong(name[:80], "unknown name", cure)
        for part in self.inner:
            part._unknown()

    def _inner(self, name: str, value: Mapping[str, Any]) -> Body:
        part = Body(value, where=self._at(name), problems=self.problems)
        self.inner.append(part)
        return part

    def _list(self, name: str, most: int = MOST_ITEMS) -> list[Any]:
        value = self._take(name, False)
        if value is _NOTHING or value is None:
            return []
        if not isinstance(value, list) or len(value) > most:
            self._wrong(name, "not a list" if not isinstance(value, list) else f"{len(value)} entries",
                        f"a list of at most {most}")  # fmt: skip
            return []
        return value

    def _of_type(self, name: str, kind: type, called: str, default: Any, required: bool) -> Any:
        value = self._take(name, required)
        if value is _NOTHING:
            return default
        if not isinstance(value, kind):
            self._wrong(name, f"not {called}", called)
            return default
        return value

    def _is_text(self, name: str, value: object) -> bool:
        if not isinstance(value, str):
            self._wrong(name, "not a text", "a text")
        return isinstance(value, str)

    def _is_number(self, name: str, value: Any) -> bool:
        good = isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
        if not good:
            self._wrong(name, "not a number", "a number")
        return good

    def _is_whole(self, name: str, value: object) -> bool:
        good = isinstance(value, int) and not isinstance(value, bool)
        if not good:
            self._wrong(name, "not a whole number", "a whole number")
        return good

    def _take(self, name: str, required: bool) -> Any:
        self.known.add(name)
        value = self.values.get(name, _NOTHING)
        if required and (value is _NOTHING or value is None):
            self._wrong(name, "is missing", "")
            return _NOTHING
        return value

    def _at(self, name: str) -> str:
        return f"{self.where}.{name}" if self.where else name

    def _wrong(self, name: str, message: str, cure: str) -> None:
        self.problems.append(Problem(message, field=self._at(name), cure=cure))
