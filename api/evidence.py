"""The evidence grid: runs down, model versions across, a verdict where they meet."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from django.urls import path
from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.pagination import link_header, requested_page
from api.queries import PROJECT, project_in
from api.run_shapes import VersionName
from api.schema import PAGE_PARAMETERS, operation
from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.selectors import GridColumn, grid_columns, grid_of, tried_run_ids
from kinetics_db.projects.selectors import project_with_role, roles_remembered
from kinetics_db.runs.query import RunQuery, runs_found

if TYPE_CHECKING:
    from kinetics_db.evidence.selectors import Cell, Grid
    from kinetics_db.runs.models import Run

MOST_COLUMNS = 200
ORDER = ("code", "id")


class GridColumnSchema(serializers.Serializer):
    """A mechanism version as fitted: its newest finished fit on one dataset."""

    fit = serializers.IntegerField()
    version = VersionName()
    dataset = serializers.CharField()
    dataset_id = serializers.IntegerField()
    status = serializers.CharField()
    aicc = serializers.FloatField(allow_null=True)
    bic = serializers.FloatField(allow_null=True)
    delta_aicc = serializers.FloatField(
        allow_null=True, help_text="above the lowest of the converged fits to the same points"
    )
    stale = serializers.ListField(child=serializers.CharField(), help_text="why it is no longer current")


class CellSchema(serializers.Serializer):
    """The verdict on a run under one fit."""

    fit = serializers.IntegerField()
    verdict = serializers.CharField()
    observable = serializers.CharField(help_text="which one decided")
    p_value = serializers.FloatField(allow_null=True)
    nrmse = serializers.FloatField(allow_null=True)
    pull = serializers.FloatField(allow_null=True)
    pull_name = serializers.CharField()
    table = serializers.CharField()


class GridRow(serializers.Serializer):
    """A run with its verdicts; where there is none it was never tried."""

    run = serializers.IntegerField()
    code = serializers.CharField()
    cells = CellSchema(many=True, help_text="in the order of the columns")


class GridSchema(serializers.Serializer):
    """A page of runs under all columns."""

    columns = GridColumnSchema(many=True)
    older_columns = serializers.IntegerField(
        help_text="how many more there are; choose a mechanism to see them"
    )
    items = GridRow(many=True)


class EvidenceGrid(ApiView):
    """Which model version explains which run."""

    @operation(
        "get_evidence", tag="fits", answers=GridSchema,
        summary="The evidence grid of a project, a page of runs at a time",
        params=[
            PROJECT,
            OpenApiParameter("mechanism", OpenApiTypes.STR, description="versions of this mechanism only"),
            OpenApiParameter("q", OpenApiTypes.STR, description="runs, as the search line of the pages finds them"),
            *PAGE_PARAMETERS,
        ],
    )  # fmt: skip
    def get(self, request: Request) -> Response:
        params = self.params(request, "project", "mechanism", "q", paged=True)
        slug, user = project_in(params), request.user
        query = _query(params.get("q", ""))
        with roles_remembered():
            project, _ = project_with_role(user=user, slug=slug)
            chosen = grid_columns(
                user=user, project_id=project.pk, mechanism=params.get("mechanism", ""), most=MOST_COLUMNS
            )
            tried = runs_found(user=user, query=query, project_id=project.pk)
            page = requested_page(request, tried.filter(pk__in=tried_run_ids(chosen.columns)), order=ORDER)
            ids = [run.pk for run in page.items]
            grid = grid_of(user=user, project_id=project.pk, run_ids=ids, columns=chosen.columns)
        response = Response(
            {
                "columns": [_column(column) for column in chosen.columns],
                "older_columns": chosen.left_out,
                "items": _rows(grid, page.items),
            }
        )
        if links := link_header(request, page):
            response["Link"] = links
        return response


def _query(text: str) -> RunQuery:
    try:
        return RunQuery.from_text(text)
    except InvalidInput as error:
        raise InvalidInput([replace(problem, field="q") for problem in error.problems]) from error


def _column(column: GridColumn) -> dict[str, Any]:
    origin = column.origin
    assert origin is not None
    return {
        "fit": column.fit_id,
        "version": {
            "id": origin.version_id,
            "mechanism": origin.mechanism_name,
            "number": int(column.mechanism.rpartition(" v")[2]),
        },
        "dataset": column.dataset,
        "dataset_id": origin.dataset_id,
        "status": column.status,
        "aicc": column.aicc,
        "bic": column.bic,
        "delta_aicc": column.delta_aicc,
        "stale": list(column.stale.reasons),
    }


def _rows(grid: Grid, runs: Sequence[Run]) -> list[dict[str, Any]]:
    return [
        {
            "run": run.pk,
            "code": run.code,
            "cells": [
                _cell(cell)
                for column in grid.columns
                if (cell := grid.cells.get((run.code, column.fit_id))) is not None
            ],
        }
        for run in runs
    ]


def _cell(cell: Cell) -> dict[str, Any]:
    return {
        "fit": cell.fit_id,
        "verdict": cell.verdict,
        "observable": cell.observable,
        "p_value": cell.p_value,
        "nrmse": cell.nrmse,
        "pull": cell.pull,
        "pull_name": cell.pull_name,
        "table": cell.table,
    }


urlpatterns = [path("evidence/", EvidenceGrid.as_view(), name="evidence")]
