"""The family of errors that every layer raises and every entrance knows how to show.

A message says what is wrong, where, and what would be accepted.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True)
class Problem:
    """One thing wrong with an input, and where it stands.

    ``line`` and ``column`` count from 1; ``field`` names a form field or a key; ``cure`` says what would
    be accepted. A 'warning' informs and does not stop.
    """

    message: str
    line: int | None = None
    column: int | None = None
    field: str | None = None
    cure: str = ""
    severity: Literal["error", "warning"] = "error"

    def __str__(self) -> str:
        place = ""
        if self.line is not None:
            place = f"line {self.line}"
            if self.column is not None:
                place += f", column {self.column}"
            place += ": "
        elif self.field:
            place = f"{self.field}: "
        cure = f" ({self.cure})" if self.cure else ""
        return f"{place}{self.message}{cure}"


class RatewrightError(Exception):
    """Base of all errors meant for the person who made the request."""


class InvalidInput(RatewrightError):
    """What was given cannot be used; holds every problem found, not only the first."""

    def __init__(
        self, problems: str | Problem | Sequence[Problem], *, field: str | None = None, cure: str = ""
    ):
        if isinstance(problems, str):
            problems = [Problem(problems, field=field, cure=cure)]
        elif isinstance(problems, Problem):
            problems = [problems]
        self.problems: tuple[Problem, ...] = tuple(problems)
        super().__init__("; ".join(str(p) for p in self.problems))

    def __reduce__(self) -> tuple[type[InvalidInput], tuple[tuple[Problem, ...]]]:
        return type(self), (self.problems,)


class NotPermitted(RatewrightError):
    """The person may see the record but not do this to it."""


class NotFound(RatewrightError):
    """There is no such record, or the person may not know of it."""


class Conflict(RatewrightError):
    """Somebody else changed the record first, or its state does not allow this."""


class Unavailable(RatewrightError):
    """A service that this needs (database, queue, file store) does not answer now."""
