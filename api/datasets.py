"""Datasets: frozen choices of tables, and all their numbers as one tidy table."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from django.http.response import HttpResponseBase
from django.urls import path, reverse
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.etags import etag_of
from api.negotiation import Tabular, tabular
from api.numbers import AS_NUMBERS, FORM, NumbersView
from api.queries import PROJECT, newest, project_in
from api.schema import operation
from kinetics_db.datasets.selectors import dataset_by_id, datasets_in, item_lines, staleness_of
from kinetics_db.datasets.services import Window, freeze_dataset
from kinetics_db.errors import Problem
from kinetics_db.exchange.tidy import tidy_columns
from kinetics_db.projects.selectors import project_named, project_with_role, roles_remembered

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from kinetics_db.datasets.models import Dataset

MOST_TABLES = 10_000


class WindowSchema(serializers.Serializer):
    """Which part of a table counts; all of it where nothing is said."""

    start = serializers.FloatField(required=False, allow_null=True, help_text="s")
    end = serializers.FloatField(required=False, allow_null=True, help_text="s")
    columns = serializers.ListField(
        child=serializers.CharField(), required=False, allow_null=True, help_text="null for all"
    )
    left_out = serializers.DictField(
        child=serializers.CharField(),
        required=False,
        help_text="'column@row' (rows from 0, * for all of them) to the reason why it does not count",
    )


class NewDataset(serializers.Serializer):
    """A choice of tables to be frozen, each with the newest revision of its run."""

    project = serializers.CharField(help_text="short name")
    name = serializers.CharField(max_length=120)
    tables = serializers.ListField(
        child=serializers.IntegerField(), help_text="concentration tables in order"
    )
    windows = serializers.DictField(child=WindowSchema(), required=False, help_text="by number of the table")


class ShownDataset(serializers.Serializer):
    """A dataset in a list."""

    id = serializers.IntegerField()
    name = serializers.CharField()
    number = serializers.IntegerField()
    basis = serializers.ChoiceField(["mol/L", "relative"])
    tables = serializers.IntegerField(help_text="how many")
    stale = serializers.BooleanField(help_text="whether a run or a table of it has changed since")
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()


class DatasetItemSchema(serializers.Serializer):
    """A run's table in a dataset."""

    run = serializers.IntegerField()
    code = serializers.CharField(help_text="of the run")
    revision = serializers.IntegerField(help_text="of the run, as it was frozen")
    table = serializers.IntegerField()
    window = WindowSchema()


class DatasetDetail(ShownDataset):
    """A dataset with its tables."""

    project = serializers.CharField()
    items = DatasetItemSchema(many=True)
    stale_because = serializers.ListField(child=serializers.CharField())


class Datasets(ApiView):
    """Datasets of a project."""

    @operation(
        "list_datasets", tag="datasets", summary="Datasets of a project, the newest first", answers=ShownDataset,
        params=[PROJECT], paged=True,
    )  # fmt: skip
    def get(self, request: Request) -> Response:
        slug = project_in(self.params(request, "project", paged=True))
        with roles_remembered():
            project, _ = project_with_role(user=request.user, slug=slug)
            datasets = datasets_in(user=request.user, project_id=project.pk)
            return self.listed(request, datasets, order=("-created", "-id"), shown=lambda rows: _rows(rows))

    @operation(
        "freeze_dataset", tag="datasets", status=(200, 201), takes=NewDataset, answers=DatasetDetail, keyed=True,
        summary="Freeze a choice of tables",
        description="201 with the Location of the dataset, 200 when the same choice has that name already.",
    )  # fmt: skip
    def post(self, request: Request) -> Response:
        self.params(request)
        body = Body.of(request)
        slug, name = body.text("project", required=True), body.text("name", required=True)
        tables = body.wholes("tables", most=MOST_TABLES)
        windows = _windows(body)
        body.done()
        project = project_named(user=request.user, slug=slug)
        before = newest(datasets_in(user=request.user, project_id=project.pk))
        made = freeze_dataset(
            user=request.user, project_id=project.pk, name=name, table_ids=tables, windows=windows
        )
        dataset = dataset_by_id(user=request.user, dataset_id=made.pk)
        return self.created(
            _detail(dataset, staleness_of([dataset.pk])[dataset.pk].reasons),
            location=reverse("api:dataset", kwargs={"dataset_id": dataset.pk}),
            status=201 if dataset.pk > before else 200,
        )


class OneDataset(ApiView):
    """A dataset."""

    @operation("get_dataset", tag="datasets", summary="A dataset with its tables", answers=DatasetDetail)
    def get(self, request: Request, dataset_id: int) -> HttpResponseBase:
        self.params(request)
        dataset = dataset_by_id(user=request.user, dataset_id=dataset_id)
        reasons = staleness_of([dataset.pk])[dataset.pk].reasons
        return self.conditional(
            request,
            lambda: _detail(dataset, reasons),
            etag_over=("dataset", dataset.pk, dataset.digest, reasons),
        )


class TidyTable(NumbersView):
    """All numbers of a dataset."""

    @operation(
        "get_dataset_table", tag="datasets", answers=AS_NUMBERS, params=[FORM],
        summary="Every value of a dataset in one tidy table, as .csv, .parquet or .json",
        description="A row for each value: run, run_revision, table, time_s, column, value, standard_uncertainty, "
        "unit, and left_out with the reason why the dataset leaves the point out.",
    )  # fmt: skip
    def get(self, request: Request, dataset_id: int, form: str) -> HttpResponseBase:
        self.params(request)
        with roles_remembered():
            dataset = dataset_by_id(user=request.user, dataset_id=dataset_id)
            return self.conditional(
                request,
                lambda: tabular(
                    request, Tabular(tidy_columns(user=request.user, dataset=dataset), _about(dataset))
                ),
                etag=etag_of(request.accepted_renderer.format, "tidy", dataset.pk, dataset.digest),
                immutable=True,
            )


def _about(dataset: Dataset) -> dict[str, Any]:
    return {
        "dataset": dataset.pk,
        "name": dataset.name,
        "number": dataset.number,
        "basis": dataset.basis,
        "digest": dataset.digest,
    }


def _windows(body: Body) -> dict[int, Window]:
    """Windows by number of the table; what is wrong is collected in the body."""
    outer = body.part("windows")
    found: dict[int, Window] = {}
    for name in outer.values if outer is not None else ():
        assert outer is not None
        part = outer.part(name)
        if not (name.isascii() and name.isdecimal() and len(name) <= 18):
            problem = Problem(
                "not the number of a table", field=f"windows.{name:.80}", cure="a table's number"
            )
            body.problems.append(problem)
        elif part is not None:
            left_out = {}
            for place, reason in part.named("left_out").items():
                left_out[place] = str(reason)
                if not isinstance(reason, str):
                    field = f"windows.{name}.left_out.{place:.80}"
                    body.problems.append(Problem("not a text", field=field, cure="the reason"))
            columns = None if part.plain("columns") is None else part.texts("columns")
            found[int(name)] = Window(
                start=part.number("start"),
                end=part.number("end"),
                columns=None if columns is None else tuple(columns),
                left_out=left_out,
            )
    return found


def _rows(datasets: Sequence[Dataset]) -> list[dict[str, Any]]:
    rows: Sequence[Any] = datasets
    return [{**_plain(d), "tables": d.number_of_tables, "stale": d.stale} for d in rows]


def _plain(dataset: Dataset) -> dict[str, Any]:
    return {
        "id": dataset.pk,
        "name": dataset.name,
        "number": dataset.number,
        "basis": dataset.basis,
        "digest": dataset.digest,
        "created": dataset.created,
        "created_by": dataset.created_by.get_username(),
    }


def _detail(dataset: Dataset, reasons: Sequence[str]) -> dict[str, Any]:
    items = item_lines(dataset)
    frozen: Sequence[Mapping[str, Any]] = dataset.content["items"]
    return {
        **_plain(dataset),
        "project": dataset.project.slug,
        "tables": len(items),
        "stale": bool(reasons),
        "stale_because": list(reasons),
        "items": [
            {
                "run": item.run_revision.run_id,
                "code": item.run_revision.run.code,
                "revision": item.run_revision.number,
                "table": item.table_id,
                "window": entry["window"],
            }
            for item, entry in zip(items, frozen, strict=True)
        ],
    }


urlpatterns = [
    path("datasets/", Datasets.as_view(), name="datasets"),
    path("datasets/<int:dataset_id>/", OneDataset.as_view(), name="dataset"),
    path("datasets/<int:dataset_id>/table.<str:form>", TidyTable.as_view(), name="dataset-table"),
]
