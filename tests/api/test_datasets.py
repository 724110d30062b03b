"""Datasets over REST, and their numbers in a notebook."""

from __future__ import annotations

import csv
import io
from typing import Any

import numpy as np
import pandas as pd
import pytest

from kinetics_db.datasets.models import Dataset
from kinetics_db.exchange.tidy import tidy_csv
from kinetics_db.measurements.services import reduce_signals, supersede_table
from kinetics_db.runs.entry import Amount
from tests.api.conftest import problem
from tests.api.study import Asked, costs_few_queries, fields_of, hides
from tests.factories.flow import make_reported_table, make_run
from tests.factories.small import decay_file

pytestmark = pytest.mark.django_db


@pytest.fixture
def asked() -> Asked:
    return Asked.fresh()


def frozen(asked: Asked, **change: Any) -> Any:
    body = {
        "project": asked.slug,
        "name": "first runs",
        "tables": [table.pk for table in asked.study.tables],
        **change,
    }
    return asked.script.post("datasets/", {name: value for name, value in body.items() if value is not ...})


def test_a_frozen_choice_is_there_at_its_location_and_made_once(asked: Asked) -> None:
    first = asked.study.tables[0]
    windows = {str(first.pk): {"end": 200, "columns": ["A"], "left_out": {"A@0": "bubble"}}}
    response = frozen(asked, windows=windows)
    assert response.status_code == 201
    body = asked.script.get(response["Location"].removeprefix("/api/v1/")).json()
    assert body == response.json()
    assert (body["name"], body["number"], body["tables"], body["basis"]) == ("first runs", 1, 2, "mol/L")
    assert body["stale"] is False and body["stale_because"] == []
    assert [(i["code"], i["table"], i["revision"]) for i in body["items"]] == [
        ("R-1", first.pk, 1),
        ("R-2", asked.study.tables[1].pk, 1),
    ]
    assert body["items"][0]["window"] == {
        "start": None,
        "end": 200.0,
        "columns": ["A"],
        "left_out": {"A@0": "bubble"},
    }
    again = frozen(asked, windows=windows)
    assert again.status_code == 200 and again.json() == body
    assert frozen(asked).json()["number"] == 2


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"name": ...}, "name"), ({"name": ""}, "name"), ({"name": 3}, "name"), ({"project": ...}, "project"),
        ({"tables": ...}, "tables"), ({"tables": []}, "tables"), ({"tables": [999_999]}, "tables"),
        ({"tables": [2**53 - 1, -1]}, "tables"), ({"tables": ["1"]}, "tables.1"), ({"tables": [True]}, "tables.1"),
        ({"tables": [None]}, "tables.1"), ({"tables": 1}, "tables"), ({"tables": [1] * 10_001}, "tables"),
        ({"windows": []}, "windows"), ({"windows": {"x": {}}}, "windows.x"), ({"windows": {"-1": {}}}, "windows.-1"),
        ({"windows": {"9" * 40: {}}}, "windows." + "9" * 40), ({"windows": {"1": 3}}, "windows.1"),
        ({"windows": {"999999": {}}}, "windows.999999"),
        ({"windows": {"1": {"start": "early"}}}, "windows.1.start"),
        ({"windows": {"1": {"columns": "A"}}}, "windows.1.columns"),
        ({"windows": {"1": {"columns": [1]}}}, "windows.1.columns.1"),
        ({"windows": {"1": {"left_out": []}}}, "windows.1.left_out"),
        ({"windows": {"1": {"left_out": {"A@1": 3}}}}, "windows.1.left_out.A@1"),
        ({"windows": {"1": {"begin": 3}}}, "windows.1.begin"), ({"colour": 1}, "colour"),
    ],
)  # fmt: skip
def test_a_choice_that_cannot_be_is_refused_with_its_field(
    asked: Asked, change: dict[str, Any], field: str
) -> None:
    assert field in fields_of(problem(frozen(asked, **change), 422))
    assert Dataset.objects.count() == 1  # the study's own


@pytest.mark.parametrize(
    "window",
    [{"columns": ["Z"]}, {"columns": []}, {"start": 1e9}, {"end": -1}, {"left_out": {"A@99": "x"}},
     {"left_out": {"A@1": " "}}, {"left_out": {"A@1": "a\x07"}}, {"left_out": {"nonsense": "x"}}],
)  # fmt: skip
def test_a_window_that_does_not_fit_its_table_is_refused(asked: Asked, window: dict[str, Any]) -> None:
    number = str(asked.study.tables[0].pk)
    assert set(fields_of(problem(frozen(asked, windows={number: window}), 422))) == {f"windows.{number}"}


def test_tables_of_another_project_are_not_there(asked: Asked) -> None:
    other = Asked.fresh(starts=(10.0,)).study.tables[0]
    assert fields_of(problem(frozen(asked, tables=[other.pk]), 422)) == ["tables"]


def test_a_dataset_whose_data_have_changed_says_so_with_another_tag(asked: Asked) -> None:
    path = f"datasets/{asked.study.dataset.pk}/"
    before = asked.script.get(path)
    older = asked.study.tables[0]
    recipe = {"kind": "as reported", "columns": [{"signal": "A", "species": "A"}]}
    newer = reduce_signals(user=asked.study.user, signal_table=older.signal_table, name="new", recipe=recipe)
    supersede_table(user=asked.study.user, older=older, newer=newer, reason="drift")
    after = asked.script.get(path, If_None_Match=before["ETag"])
    assert after.status_code == 200 and after.json()["stale"] is True
    assert "superseded" in after.json()["stale_because"][0]
    assert asked.script.get(path, If_None_Match=after["ETag"]).status_code == 304
    assert asked.script.get(f"datasets/?project={asked.slug}").json()["items"][0]["stale"] is True


def test_datasets_are_listed_in_few_queries(asked: Asked) -> None:
    for name in ("b", "c"):
        frozen(asked, name=name)
    rows = costs_few_queries(asked.script, f"datasets/?project={asked.slug}")["items"]
    assert [(row["name"], row["tables"]) for row in rows] == [("c", 2), ("b", 2), ("all", 2)]
    assert fields_of(problem(asked.script.get("datasets/"), 422)) == ["project"]


def test_the_tidy_table_is_the_same_in_three_forms(asked: Asked) -> None:
    first = asked.study.tables[0].pk
    number = frozen(asked, windows={str(first): {"left_out": {"A@0": "=bubble"}}}).json()["id"]
    as_csv = asked.script.get(f"datasets/{number}/table.csv")
    text = b"".join(as_csv.streaming_content).decode()
    assert text == tidy_csv(user=asked.study.user, dataset_id=number)
    rows = list(csv.DictReader(io.StringIO(text)))
    assert len(rows) == 48 and rows[0]["left_out"] == "'=bubble" and rows[0]["unit"] == "mol/L"
    frame = pd.read_parquet(io.BytesIO(asked.script.get(f"datasets/{number}/table.parquet").content))
    assert list(frame.columns) == list(rows[0])
    assert frame["run"].tolist() == [row["run"] for row in rows]
    assert frame["left_out"][0] == "=bubble" and frame["table"].dtype == np.int64
    np.testing.assert_array_equal(frame["value"], [float(row["value"]) for row in rows])
    columns = asked.script.get(f"datasets/{number}/table.json").json()["columns"]
    assert [c["name"] for c in columns] == list(frame.columns)
    assert columns[5]["values"] == frame["value"].tolist()
    etag = as_csv["ETag"]
    assert asked.script.get(f"datasets/{number}/table.csv", If_None_Match=etag).status_code == 304


def test_datasets_are_for_members_and_frozen_by_contributors(asked: Asked) -> None:
    number = asked.study.dataset.pk
    for path in (
        f"datasets/?project={asked.slug}",
        f"datasets/{number}/",
        f"datasets/{number}/table.parquet",
    ):
        hides(path)
        assert asked.reader().get(path).status_code == 200
    problem(asked.script.get("datasets/999999/"), 404)
    problem(asked.script.get(f"datasets/{number}/table.xlsx"), 404)
    tables = [table.pk for table in asked.study.tables]
    asked.refuses_others("datasets/", {"project": asked.slug, "name": "theirs", "tables": tables})


def test_percentages_are_frozen_apart_from_concentrations(asked: Asked) -> None:
    run = make_run(asked.study.user, asked.study.project.pk, "P-1", {"A": Amount(100, "%")})
    text = decay_file(10.0, 0.01, seed=9).replace("A / mM", "A / %").replace("B / mM", "B / %")
    percent = make_reported_table(asked.study.user, run, text, {"A": "A"})
    response = frozen(asked, tables=[asked.study.tables[0].pk, percent.pk])
    assert fields_of(problem(response, 422)) == ["tables"]
    assert frozen(asked, tables=[percent.pk]).json()["basis"] == "relative"


@pytest.mark.django_db(transaction=True)
def test_a_notebook_reads_it_with_one_line(live_server: Any) -> None:
    asked = Asked.fresh(starts=(10.0,))
    address = f"{live_server.url}/api/v1/datasets/{asked.study.dataset.pk}/table"
    login = {"Authorization": f"Bearer {asked.script.secret}"}
    frame = pd.read_parquet(f"{address}.parquet", storage_options=login)
    other = pd.read_csv(f"{address}.csv", storage_options=login, keep_default_na=False)
    assert len(frame) == 24 and set(frame["run"]) == {"R-1"}
    pd.testing.assert_frame_equal(frame, other, check_dtype=False, check_exact=True)
