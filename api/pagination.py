"""Lists in pages: a cursor, and Link headers to the pages beside this one (RFC 8288). Nothing is counted."""

from __future__ import annotations

from typing import Any

from django.utils.http import urlencode
from rest_framework.request import Request

from kinetics_db.errors import InvalidInput
from kinetics_db.paging import LARGEST_SIZE, SIZE, Page, page_of

PARAMS = ("cursor", "size")


def requested_page(request: Request, queryset: Any, *, order: tuple[str, ...]) -> Page[Any]:
    """The page that ``?cursor=`` and ``?size=`` ask for, in one query."""
    text = request.query_params.get("size", str(SIZE))
    if not (text.isascii() and text.isdigit() and 1 <= int(text[:9]) <= LARGEST_SIZE):
        raise InvalidInput(f"{text!r:.40} rows a page", field="size", cure=f"1 to {LARGEST_SIZE}")
    return page_of(queryset, order=order, cursor=request.query_params.get("cursor"), size=int(text))


def link_header(request: Request, page: Page[Any]) -> str:
    """Links to the next and the previous page; empty when there are none."""
    beside = (("next", page.next), ("prev", page.previous))
    return ", ".join(f'<{_address(request, cursor)}>; rel="{name}"' for name, cursor in beside if cursor)


def _address(request: Request, cursor: str) -> str:
    kept = [(k, v) for k, values in request.query_params.lists() if k != "cursor" for v in values]
    return request.build_absolute_uri(f"{request.path}?{urlencode([*kept, ('cursor', cursor)])}")
