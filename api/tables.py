"""Concentration tables: made from signals by a recipe, read as numbers, replaced by newer ones."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

from django.http.response import HttpResponseBase
from django.urls import path, reverse
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter, PolymorphicProxySerializer
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.etags import etag_of
from api.negotiation import Tabular, tabular
from api.numbers import AS_NUMBERS, FORM, NumbersView
from api.queries import newest, problems_under, referred, truth_in
from api.schema import operation
from api.table_shapes import (
    NewSupersession,
    NewTable,
    ReducedPreview,
    ShownTable,
    TableDetail,
    plain_reduced,
    plain_table,
    plain_table_detail,
)
from kinetics_db.errors import InvalidInput
from kinetics_db.exchange.tables import table_columns
from kinetics_db.measurements.selectors import signal_table_by_id, table_by_id, tables_of_run
from kinetics_db.measurements.services import preview_reduction, reduce_signals, supersede_table
from kinetics_db.projects.selectors import roles_remembered
from kinetics_db.runs.selectors import run_by_id

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable

LONGEST_RECIPE = 100_000
"""Characters; a recipe for hundreds of signals has a tenth of them."""


TABLE_OR_PREVIEW = PolymorphicProxySerializer(
    "TableOrPreview", serializers=[TableDetail, ReducedPreview], resource_type_field_name=None
)


class Tables(ApiView):
    """Concentration tables of a run."""

    @operation(
        "list_tables", tag="measurements", summary="Concentration tables of a run, the newest first",
        answers=ShownTable, paged=True,
    )  # fmt: skip
    def get(self, request: Request, run_id: int) -> Response:
        self.params(request, paged=True)
        with roles_remembered():
            run = run_by_id(user=request.user, run_id=run_id)
            tables = tables_of_run(user=request.user, run=run).prefetch_related("columns")
            return self.listed(
                request, tables, order=("-number", "-id"), shown=lambda rows: [plain_table(t) for t in rows]
            )

    @operation(
        "reduce_signals", tag="measurements", status=(200, 201), takes=NewTable, keyed=True,
        answers=TABLE_OR_PREVIEW, summary="Reduce signals to concentrations by a recipe",
        params=[OpenApiParameter("preview", OpenApiTypes.BOOL, description="compute only, keep nothing")],
        description="201 with the Location of the concentration table, 200 when the same reduction of the same "
        "signals is there already. With preview=true nothing is kept: 200 with what the recipe gives (its "
        "columns, first rows, notes, warnings and common errors).",
    )  # fmt: skip
    def post(self, request: Request, run_id: int) -> Response:
        preview = truth_in(self.params(request, "preview"), "preview")
        body = Body.of(request)
        number, name = body.whole("signal_table", required=True), body.text("name", required=not preview)
        recipe = dict(body.named("recipe", required=True))
        body.done()
        if len(json.dumps(recipe)) > LONGEST_RECIPE:
            raise InvalidInput("too long", field="recipe", cure=f"at most {LONGEST_RECIPE:,} characters")
        run = run_by_id(user=request.user, run_id=run_id)
        signals = referred(
            "signal_table", number, lambda pk: signal_table_by_id(user=request.user, signal_table_id=pk)
        )
        if signals.file.run_id != run.pk:
            raise InvalidInput(
                "the signals are of another run", field="signal_table", cure=f"signals of {run.code}"
            )
        if preview:
            with problems_under("recipe"):
                tried = preview_reduction(user=request.user, signal_table=signals, recipe=recipe)
            return Response(plain_reduced(tried))
        before = newest(tables_of_run(user=request.user, run=run))
        with problems_under("recipe", but=("name",)):
            table = reduce_signals(user=request.user, signal_table=signals, name=name, recipe=recipe)
        return self.created(
            plain_table_detail(table),
            location=reverse("api:table", kwargs={"table_id": table.pk}),
            status=201 if table.pk > before else 200,
        )


class OneTable(NumbersView):
    """A concentration table."""

    @operation(
        "get_table", tag="measurements", summary="A concentration table, and what it was made from",
        answers={**AS_NUMBERS, "application/json": TableDetail},
        description="Without its numbers as JSON; with Accept: text/csv or application/vnd.apache.parquet the "
        "numbers.",
    )  # fmt: skip
    def get(self, request: Request, table_id: int) -> HttpResponseBase:
        self.params(request)
        table = table_by_id(user=request.user, table_id=table_id)
        if self.wants_numbers(request):
            return _numbers(self, request, table)
        return self.conditional(
            request,
            lambda: plain_table_detail(table),
            etag_over=("table", table.pk, table.digest, _newer(table)),
        )


class TableNumbers(NumbersView):
    """The numbers of a concentration table."""

    @operation(
        "get_table_numbers", tag="measurements", answers=AS_NUMBERS, params=[FORM],
        summary="Times, concentrations and their standard uncertainties, as .csv, .parquet or .json",
    )  # fmt: skip
    def get(self, request: Request, table_id: int, form: str) -> HttpResponseBase:
        self.params(request)
        return _numbers(self, request, table_by_id(user=request.user, table_id=table_id))


class Supersede(ApiView):
    """Replaces a table."""

    @operation(
        "supersede_table", tag="measurements", takes=NewSupersession, answers=TableDetail, keyed=True,
        summary="Say that a newer table of the run replaces this one; fits on it become stale",
    )  # fmt: skip
    def post(self, request: Request, table_id: int) -> Response:
        self.params(request)
        body = Body.of(request)
        number, reason = body.whole("newer", required=True), body.text("reason", required=True)
        body.done()
        older = table_by_id(user=request.user, table_id=table_id)
        newer = referred("newer", number, lambda pk: table_by_id(user=request.user, table_id=pk))
        supersede_table(user=request.user, older=older, newer=newer, reason=reason)
        return Response(plain_table_detail(table_by_id(user=request.user, table_id=table_id)))


def _numbers(view: ApiView, request: Request, table: ConcentrationTable) -> HttpResponseBase:
    about: dict[str, Any] = {
        "table": table.pk,
        "run": table.run.code,
        "number": table.number,
        "basis": table.basis,
        "digest": table.digest,
    }
    return view.conditional(
        request,
        lambda: tabular(request, Tabular(table_columns(table.table), about)),
        etag=etag_of(request.accepted_renderer.format, "numbers", table.pk, table.digest),
        immutable=True,
    )


def _newer(table: ConcentrationTable) -> str:
    newer = getattr(table, "superseded_by", None)
    return newer.digest if newer is not None else ""


urlpatterns = [
    path("runs/<int:run_id>/tables/", Tables.as_view(), name="run-tables"),
    path("tables/<int:table_id>/", OneTable.as_view(), name="table"),
    path("tables/<int:table_id>.<str:form>", TableNumbers.as_view(), name="table-numbers"),
    path("tables/<int:table_id>/supersede/", Supersede.as_view(), name="supersede-table"),
]
