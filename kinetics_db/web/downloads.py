"""Headers of downloads: names that no system misreads, and how long a browser may keep what it got."""

from __future__ import annotations

import re
from collections.abc import Iterable

from django.http import HttpRequest, HttpResponseBase, HttpResponseNotModified
from django.utils.http import content_disposition_header, parse_etags

from kinetics_db.web.csv_files import csv_download
from kinetics_db.web.present.charts import name_of

A_YEAR = 365 * 24 * 3600
FOR_GOOD = f"private, max-age={A_YEAR}, immutable"
ASK_AGAIN = "private, no-cache"
_TURNING = re.compile("[\u061c\u200e\u200f\u202a-\u202e\u2066-\u2069]")


def known_already(request: HttpRequest, tag: str) -> HttpResponseBase | None:
    """The answer 304 when the browser has these bytes."""
    given = parse_etags(request.headers.get("If-None-Match", ""))
    if f'"{tag}"' not in given and "*" not in given:
        return None
    return marked(HttpResponseNotModified(), tag, keep=ASK_AGAIN)


def marked(response: HttpResponseBase, tag: str, *, keep: str) -> HttpResponseBase:
    """The response with its tag and how long it may be kept."""
    response.headers["ETag"] = f'"{tag}"'
    response.headers["Cache-Control"] = keep
    return response


def as_attachment(response: HttpResponseBase, name: str) -> HttpResponseBase:
    """The response as a file to be saved (RFC 6266); marks that turn the direction of writing could hide an
    ending, so they become '_'."""
    disposition = content_disposition_header(True, _TURNING.sub("_", name))
    response.headers["Content-Disposition"] = disposition or "attachment"
    return response


def csv_response(request: HttpRequest, pieces: Iterable[str], *, name: str, digest: str) -> HttpResponseBase:
    """A table as CSV under a plain name; 304 when the browser has it."""
    tag = f"{digest}-csv"
    return known_already(request, tag) or marked(
        csv_download(f"{name_of(name)}.csv", pieces), tag, keep=ASK_AGAIN
    )
