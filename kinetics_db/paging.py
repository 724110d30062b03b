"""Lists cut into pages by the position of a row, so that page 2000 costs what page 1 costs.

A cursor says after (or before) which values of the order a page begins. It opens nothing that the queryset does
not hold, so it needs no signature, and rows that are added meanwhile shift nothing.
"""

from __future__ import annotations

import base64
import binascii
import json
import math
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime
from typing import Any, Generic, TypeVar

from django.db import models
from django.db.models import Q, QuerySet

from kinetics_db.errors import InvalidInput

T = TypeVar("T", bound=models.Model)

SIZE = 50
LARGEST_SIZE = 200
LONGEST_CURSOR = 2000
CURE = "leave it out for the first page, or take it from the links of another page"
FORWARD, BACK = "after", "before"


@dataclass(frozen=True)
class Page(Generic[T]):
    """Some rows of a list, and the cursors of the pages beside it (None where there is none)."""

    items: Sequence[T]
    next: str | None = None
    previous: str | None = None


def page_of(
    queryset: QuerySet[T], *, order: tuple[str, ...], cursor: str | None = None, size: int = SIZE
) -> Page[T]:
    """One page of a queryset, in one query.

    Parameters
    ----------
    order : fields as for ``order_by``, such as ('-created', '-id'), in one or mixed directions. The last one is
        'id', so that no two rows are equal; none of them may be NULL. A field of a related row ('run__code')
        is read from the item, so the queryset selects it with ``select_related``; annotations may be used too.
    cursor : from another page in the same order; None or '' for the first page
    size : rows on a page, 1 to 200

    Raises
    ------
    InvalidInput
        for a size out of range, and for a cursor that is damaged or of another order (fields 'size', 'cursor').
    """
    if order[-1] not in ("id", "-id"):
        raise ValueError(f"an order ends with 'id' or '-id', not {order[-1]!r}")
    if isinstance(size, bool) or not isinstance(size, int) or not 1 <= size <= LARGEST_SIZE:
        raise InvalidInput(f"{size!r:.40} rows a page", field="size", cure=f"1 to {LARGEST_SIZE}")
    direction, values = _read(cursor, queryset, order) if cursor else (FORWARD, None)
    walked = order if direction == FORWARD else tuple(_reversed(name) for name in order)
    found = queryset if values is None else queryset.filter(_beyond(walked, values))
    rows = list(found.order_by(*walked)[: size + 1])
    more, rows = len(rows) > size, rows[:size]
    if direction == BACK:
        rows.reverse()
    # A page that was reached from its neighbour has that neighbour, even where nothing is left on it.
    has_next = more if direction == FORWARD else True
    has_previous = bool(cursor) if direction == FORWARD else more
    return Page(
        rows,
        next=_written(FORWARD, order, rows[-1] if rows else None) if has_next else None,
        previous=_written(BACK, order, rows[0] if rows else None) if has_previous else None,
    )


def _reversed(name: str) -> str:
    return name[1:] if name.startswith("-") else f"-{name}"


def _beyond(order: Sequence[str], values: Sequence[Any]) -> Q:
    """Rows that come after the given values.

    The first field is also bounded by itself, which is what lets the database enter an index at that place.
    """
    beyond, equal = Q(), Q()
    for name, value in zip(order, values, strict=True):
        field, compare = (name[1:], "lt") if name.startswith("-") else (name, "gt")
        beyond |= equal & Q(**{f"{field}__{compare}": value})
        equal &= Q(**{field: value})
    if len(order) == 1:
        return beyond
    field, compare = (order[0][1:], "lte") if order[0].startswith("-") else (order[0], "gte")
    return Q(**{f"{field}__{compare}": values[0]}) & beyond


def _written(direction: str, order: tuple[str, ...], item: models.Model | None) -> str:
    """The cursor of the rows beyond an item; without one, of that end of the list."""
    values = None if item is None else [_plain(_value(item, name.lstrip("-"))) for name in order]
    text = json.dumps([direction, list(order), values], ensure_ascii=False, separators=(",", ":"))
    return base64.urlsafe_b64encode(text.encode()).decode().rstrip("=")


def _value(item: Any, path: str) -> Any:
    for name in path.split("__"):
        item = getattr(item, name)
    return item


def _plain(value: Any) -> str | int | float:
    if isinstance(value, datetime | date):
        return value.isoformat()
    if isinstance(value, str | int | float):
        return value
    raise TypeError(f"a list cannot be ordered by {type(value).__name__}")


def _read(cursor: str, queryset: QuerySet[Any], order: tuple[str, ...]) -> tuple[str, list[Any] | None]:
    if not isinstance(cursor, str) or len(cursor) > LONGEST_CURSOR:
        raise InvalidInput("this is no cursor", field="cursor", cure=CURE)
    try:
        raw = base64.b64decode(
            cursor.encode("ascii") + b"=" * (-len(cursor) % 4), altchars=b"-_", validate=True
        )
        direction, its_order, values = json.loads(raw.decode())
    except (ValueError, TypeError, RecursionError, binascii.Error) as error:
        raise InvalidInput("the cursor is damaged", field="cursor", cure=CURE) from error
    if its_order != list(order):
        raise InvalidInput("the cursor is of a list in another order", field="cursor", cure=CURE)
    if values is None and direction in (FORWARD, BACK):
        return direction, None
    if direction not in (FORWARD, BACK) or not isinstance(values, list) or len(values) != len(order):
        raise InvalidInput("the cursor is damaged", field="cursor", cure=CURE)
    try:
        return direction, [
            _restored(value, _field(queryset, name.lstrip("-")))
            for name, value in zip(order, values, strict=True)
        ]
    except (ValueError, OverflowError) as error:
        raise InvalidInput("the cursor is damaged", field="cursor", cure=CURE) from error


def _field(queryset: QuerySet[Any], path: str) -> models.Field[Any, Any]:
    """The field that a part of the order is of, through relations; or what an annotation gives."""
    if path in queryset.query.annotations:
        return queryset.query.annotations[path].output_field
    model, found = queryset.model, None
    for name in path.split("__"):
        found = model._meta.get_field(name)
        model = found.related_model
    assert isinstance(found, models.Field)
    return found


def _restored(value: object, field: models.Field[Any, Any]) -> Any:
    """A cursor's value as the field compares it; ValueError for what the field cannot hold."""
    if isinstance(field, models.DateTimeField):
        found = datetime.fromisoformat(_text(value))
        if found.tzinfo is None:
            raise ValueError("a time without a zone")
        return found.astimezone(UTC)
    if isinstance(field, models.DateField):
        return date.fromisoformat(_text(value))
    if isinstance(field, models.CharField | models.TextField):
        return _text(value)
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError("not a number")
    if isinstance(field, models.FloatField):
        if not math.isfinite(float(value)):
            raise ValueError("not finite")
        return float(value)
    if not isinstance(value, int) or abs(value) >= 2**63:
        raise ValueError("not a whole number that a database holds")
    return value


def _text(value: object) -> str:
    if not isinstance(value, str) or any(unicodedata.category(c) in ("Cc", "Cs") for c in value):
        raise ValueError("not a text that a database holds")
    return value
