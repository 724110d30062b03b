"""Rows as a CSV file (RFC 4180) that is sent while it is written."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Iterator, Sequence

from django.http import StreamingHttpResponse

from kinetics_db.exchange.tidy import FORMULA_STARTS

ROWS_AT_ONCE = 500


def csv_file(name: str, heading: Sequence[str], rows: Iterable[Sequence[object]]) -> StreamingHttpResponse:
    """The answer that downloads the rows under a name of plain letters."""
    return csv_download(name, _pieces(heading, rows))


def csv_download(name: str, pieces: Iterable[str]) -> StreamingHttpResponse:
    """The answer that downloads text as it is made."""
    response = StreamingHttpResponse(pieces, content_type="text/csv; charset=utf-8")
    response["Content-Disposition"] = f'attachment; filename="{name}"'
    return response


def _pieces(heading: Sequence[str], rows: Iterable[Sequence[object]]) -> Iterator[str]:
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow(heading)
    for number, row in enumerate(rows, start=1):
        writer.writerow([_cell(value) for value in row])
        if number % ROWS_AT_ONCE == 0:
            yield out.getvalue()
            out.seek(0)
            out.truncate()
    yield out.getvalue()


def _cell(value: object) -> object:
    """Every digit of a number; nothing for what is missing; no text that a spreadsheet takes for a formula."""
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return ""
    if isinstance(value, float):
        return repr(value)
    return f"'{value}" if isinstance(value, str) and value.startswith(FORMULA_STARTS) else value
