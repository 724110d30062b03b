"""Views whose numbers are given as JSON, CSV or Parquet, by the address's ending or the Accept header."""

from __future__ import annotations

from typing import Any

from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework import serializers
from rest_framework.request import Request

from api.base import ApiView
from api.negotiation import PARQUET, TABLE_RENDERERS
from kinetics_db.errors import NotFound

FORMS = tuple(renderer.format for renderer in TABLE_RENDERERS)
FORM = OpenApiParameter("form", OpenApiTypes.STR, OpenApiParameter.PATH, enum=list(FORMS))


class ColumnOfNumbers(serializers.Serializer):
    """A column; what is missing is null."""

    name = serializers.CharField()
    unit = serializers.CharField(help_text="'' for a pure number")
    values = serializers.ListField()


class Numbers(serializers.Serializer):
    """A table, column by column, after what is said of it as a whole."""

    columns = ColumnOfNumbers(many=True)


AS_NUMBERS = {
    "application/json": Numbers,
    "text/csv": OpenApiTypes.STR,
    PARQUET: OpenApiTypes.BINARY,
}


class NumbersView(ApiView):
    """An address that ends with .csv, .parquet or .json; without an ending Accept decides."""

    renderer_classes = TABLE_RENDERERS

    def get_format_suffix(self, **kwargs: Any) -> str | None:
        """The ending; NotFound for one that is none of them."""
        form = kwargs.get("form")
        if form is not None and form not in FORMS:
            raise NotFound(f"there is no form '{form:.20}' of it: {', '.join(FORMS)}")
        return form

    def wants_numbers(self, request: Request) -> bool:
        """Whether an address that describes a table is asked for its numbers instead."""
        return request.accepted_renderer.format != "json"
