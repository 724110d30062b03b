"""Tables in the form that the reader asks for: JSON, CSV or Parquet, by Accept header or the address's ending."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from django.http import StreamingHttpResponse
from django.http.response import HttpResponseBase
from rest_framework.renderers import BaseRenderer, JSONRenderer
from rest_framework.request import Request
from rest_framework.response import Response

from kinetics_db.errors import InvalidInput
from kinetics_db.exchange.parquet import parquet_bytes
from kinetics_db.exchange.tables import AnyColumn, csv_pieces, plain_values

PARQUET = "application/vnd.apache.parquet"


@dataclass(frozen=True)
class Tabular:
    """Columns of one length, and what is said of the whole table (plain values)."""

    columns: Sequence[AnyColumn]
    about: Mapping[str, Any] = field(default_factory=dict)


class TableJSONRenderer(JSONRenderer):
    """A table as ``{..., "columns": [{"name", "unit", "values"}]}``; anything else as usual."""

    def render(self, data: Any, *args: Any, **kwargs: Any) -> bytes:
        if isinstance(data, Tabular):
            columns = [
                {"name": c.name, "unit": c.unit, "values": plain_values(c.values)} for c in data.columns
            ]
            data = {**data.about, "columns": columns}
        return super().render(data, *args, **kwargs)


class CsvRenderer(BaseRenderer):
    """CSV (RFC 4180) with a header line: names with their units."""

    media_type = "text/csv"
    format = "csv"
    charset = "utf-8"

    def render(self, data: Any, *args: Any, **kwargs: Any) -> bytes:
        return "".join(csv_pieces(data.columns)).encode()


class ParquetRenderer(BaseRenderer):
    """Parquet; the unit of a column stands in its metadata, what is said of the table in the file's."""

    media_type = PARQUET
    format = "parquet"
    charset = None
    render_style = "binary"

    def render(self, data: Any, *args: Any, **kwargs: Any) -> bytes:
        return parquet_bytes(data.columns, data.about)


TABLE_RENDERERS = (TableJSONRenderer, CsvRenderer, ParquetRenderer)
"""For views that answer with `tabular`."""

MOST_IN_JSON = 5_000_000


def tabular(request: Request, table: Tabular) -> HttpResponseBase:
    """A table in the form that was asked for; CSV is sent while it is written."""
    form = request.accepted_renderer.format
    if form == CsvRenderer.format:
        return StreamingHttpResponse(csv_pieces(table.columns), content_type="text/csv; charset=utf-8")
    size = sum(len(column.values) for column in table.columns)
    if form == TableJSONRenderer.format and size > MOST_IN_JSON:
        raise InvalidInput(f"{size:,} values are too many for JSON", cure=f"CSV, or Parquet ({PARQUET})")
    return Response(table)
