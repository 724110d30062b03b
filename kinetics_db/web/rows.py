"""Small forms that repeat inside a larger one, such as the charges of a run; they work without JavaScript.

A row's fields are named 'charges-3-amount'. The rows that are there are those that were sent: no hidden count
can disagree with them. Buttons named after the rows add, take out and move one (`change_asked`).
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Generic, TypeVar

from django.http import QueryDict

from kinetics_db.errors import InvalidInput
from kinetics_db.web.forms import PlainForm


class RowForm(PlainForm):
    """One row. Fields named in ``silent`` only choose or are hidden: alone they do not make a row filled."""

    silent: frozenset[str] = frozenset()

    @property
    def typed(self) -> dict[str, str]:
        """What stands in the fields now."""
        values = {name: self[name].value() for name in self.fields}
        return {name: "" if value is None else str(value) for name, value in values.items()}

    @property
    def is_filled(self) -> bool:
        """Whether anything was typed."""
        return any(text.strip() for name, text in self.typed.items() if name not in self.silent)


F = TypeVar("F", bound=RowForm)

MOST_ROWS = 250
"""More than a service accepts, so that the service says what is too many and the rows stay."""

_CHANGE = re.compile(r"(add|out|up|down)(?:-(\d{1,4}))?", re.ASCII)


class Rows(Generic[F]):
    """The rows of one kind; ``forms`` are all of them, ``filled`` those in which something stands."""

    def __init__(
        self,
        form: type[F],
        prefix: str,
        *,
        data: QueryDict | None = None,
        initial: Sequence[Mapping[str, str]] = (),
    ):
        self.form, self.prefix = form, prefix
        if data is None:
            self.forms = [self._unbound(i, values) for i, values in enumerate(initial or [{}], start=1)]
        else:
            self.forms = [
                self._bound(i, values) for i, values in enumerate(self._sent(data) or [{}], start=1)
            ]

    @property
    def filled(self) -> list[F]:
        """Those in which something was typed."""
        return [form for form in self.forms if form.is_filled]

    def is_valid(self) -> bool:
        """Whether every row can be read at all."""
        valid = [form.is_valid() for form in self.forms]  # each of them, so that all say what is wrong
        return all(valid)

    def change_asked(self, data: QueryDict) -> bool:
        """Do what the pressed button asks (a row more, one out, one up or down); False where none was pressed."""
        found = _CHANGE.fullmatch(data.get(self.prefix, ""))
        if found is None:
            return False
        rows = [form.typed for form in self.forms]
        what, place = found[1], int(found[2] or 0) - 1
        focus = place
        if what == "add":
            self._refuse_beyond(len(rows) + 1)
            rows.append({})
            focus = len(rows) - 1
        elif not 0 <= place < len(rows):
            return True
        elif what == "out":
            del rows[place]
            focus = min(place, len(rows) - 1)
        else:
            focus = max(0, place - 1) if what == "up" else min(len(rows) - 1, place + 1)
            rows.insert(focus, rows.pop(place))
        self.forms = [self._unbound(i, values) for i, values in enumerate(rows or [{}], start=1)]
        fields = self.forms[max(focus, 0)].fields
        next(iter(f for f in fields.values() if not f.widget.is_hidden)).widget.attrs["autofocus"] = True
        return True

    def _sent(self, data: QueryDict) -> list[dict[str, str]]:
        """Values of the rows that came, by their numbers."""
        known = tuple(self.form.base_fields)
        sent: dict[int, dict[str, str]] = {}
        pattern = re.compile(
            rf"{re.escape(self.prefix)}-(\d{{1,4}})-({'|'.join(map(re.escape, known))})", re.ASCII
        )
        for name in data:
            if found := pattern.fullmatch(name):
                sent.setdefault(int(found[1]), {})[found[2]] = data.get(name, "")
        self._refuse_beyond(len(sent))
        return [sent[number] for number in sorted(sent)]

    def _refuse_beyond(self, number: int) -> None:
        if number > MOST_ROWS:
            message = f"{number} {self.prefix} are more than a page has room for"
            raise InvalidInput(message, field=self.prefix, cure=f"at most {MOST_ROWS}")

    def _bound(self, number: int, values: Mapping[str, str]) -> F:
        prefix = f"{self.prefix}-{number}"
        return self.form({f"{prefix}-{name}": value for name, value in values.items()}, prefix=prefix)

    def _unbound(self, number: int, values: Mapping[str, str]) -> F:
        return self.form(initial=dict(values), prefix=f"{self.prefix}-{number}")
