"""Concentration tables over REST."""

from __future__ import annotations

import csv
import io
from typing import Any

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from kinetics_db.engine.reading import read
from kinetics_db.exchange.tables import table_csv
from kinetics_db.measurements.models import ConcentrationTable, TableSupersession
from tests.api.conftest import problem
from tests.api.study import Asked, costs_few_queries, fields_of, hides

pytestmark = pytest.mark.django_db

RECIPE: dict[str, Any] = {
    "kind": "as reported",
    "columns": [{"signal": "A", "species": "A"}],
    "constant_u": 0.1,
}


@pytest.fixture
def asked() -> Asked:
    return Asked.fresh(starts=(10.0,))


def reduced(asked: Asked, *, query: str = "", **change: Any) -> Any:
    table = asked.study.tables[0]
    body = {"signal_table": table.signal_table_id, "name": "again", "recipe": RECIPE, **change}
    body = {name: value for name, value in body.items() if value is not ...}
    return asked.script.post(f"runs/{table.run_id}/tables/{query}", body)


def test_a_reduction_is_there_at_its_location_and_made_once(asked: Asked) -> None:
    response = reduced(asked)
    assert response.status_code == 201
    body = asked.script.get(response["Location"].removeprefix("/api/v1/")).json()
    assert body == response.json()
    assert body["number"] == 2 and body["basis"] == "mol/L" and body["rows"] == 12
    assert body["columns"] == [{"name": "A", "unit": "mol/L", "values": 12}]
    assert body["reduction"] == {"name": "again", "number": 1, "kind": "as reported"}
    assert body["recipe"]["constant_u"] == 0.1 and body["superseded_by"] is None
    again = reduced(asked)
    assert again.status_code == 200 and again.json() == body and again["Location"] == response["Location"]
    assert ConcentrationTable.objects.count() == 2


def test_a_preview_says_what_a_recipe_gives_and_keeps_nothing(asked: Asked) -> None:
    response = reduced(asked, query="?preview=true", name=...)
    body = response.json()
    assert response.status_code == 200 and body["basis"] == "mol/L" and body["rows"] == 12
    assert [(c["name"], c["quantity"]) for c in body["columns"]] == [
        ("t", "time"),
        ("A", "concentration"),
        ("A", "standard uncertainty"),
    ]
    assert len(body["first_rows"]) == 10 and body["first_rows"][0][2] == pytest.approx(1e-4)
    assert body["warnings"] == body["scale_errors"] == [] and body["notes"]
    assert ConcentrationTable.objects.count() == 1


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"signal_table": ...}, "signal_table"),
        ({"signal_table": None}, "signal_table"),
        ({"signal_table": 999_999}, "signal_table"),
        ({"signal_table": 2**53 - 1}, "signal_table"),
        ({"signal_table": "1"}, "signal_table"),
        ({"signal_table": True}, "signal_table"),
        ({"name": ...}, "name"),
        ({"name": ""}, "name"),
        ({"name": "x" * 121}, "name"),
        ({"name": 3}, "name"),
        ({"recipe": ...}, "recipe"),
        ({"recipe": "as reported"}, "recipe"),
        ({"recipe": {}}, "recipe.kind"),
        ({"recipe": {"kind": "magic"}}, "recipe.kind"),
        ({"recipe": {"kind": ["as reported"]}}, "recipe.kind"),
        ({"recipe": {**RECIPE, "columns": "A"}}, "recipe.columns"),
        ({"recipe": {**RECIPE, "columns": [3]}}, "recipe.columns[0]."),
        ({"recipe": {**RECIPE, "columns": [{"signal": "Z", "species": "Z"}]}}, "recipe.signal"),
        ({"recipe": {**RECIPE, "constant_u": "big"}}, "recipe.constant_u"),
        ({"recipe": {**RECIPE, "constant_u": -1}}, "recipe.constant_u"),
        ({"recipe": {**RECIPE, "colour": 1}}, "recipe.colour"),
        ({"recipe": {"kind": "as reported", "x": "y" * 200_000}}, "recipe"),
        ({"colour": 1}, "colour"),
    ],
)
def test_a_reduction_that_cannot_be_is_refused_with_its_field(
    asked: Asked, change: dict[str, Any], field: str
) -> None:
    assert field in fields_of(problem(reduced(asked, **change), 422))
    assert ConcentrationTable.objects.count() == 1


def test_signals_of_another_run_are_refused() -> None:
    asked = Asked.fresh()
    response = reduced(asked, signal_table=asked.study.tables[1].signal_table_id)
    assert problem(response, 422)["problems"][0]["message"] == "the signals are of another run"


def test_a_table_is_numbers_in_three_forms(asked: Asked) -> None:
    table = asked.study.tables[0]
    numbers = table.table
    as_csv = asked.script.get(f"tables/{table.pk}.csv")
    text = b"".join(as_csv.streaming_content).decode()
    assert text == "".join(table_csv(user=asked.study.user, table_id=table.pk))
    header = next(csv.reader(io.StringIO(text)))
    assert header == ["t / s", "A / (mol/L)", "u(A) / (mol/L)", "B / (mol/L)", "u(B) / (mol/L)"]
    np.testing.assert_array_equal(
        read(text.encode()).table.column("A", "signal"), numbers.column("A", "concentration")
    )
    parquet = asked.script.get(f"tables/{table.pk}.parquet")
    frame = pd.read_parquet(io.BytesIO(parquet.content))
    assert list(frame.columns) == ["t", "A", "u(A)", "B", "u(B)"]
    np.testing.assert_array_equal(frame["A"], numbers.column("A", "concentration"))
    schema = pq.read_schema(io.BytesIO(parquet.content))
    assert schema.field("u(A)").metadata == {b"unit": b"mol/L"} and schema.metadata[b"run"] == b'"R-1"'
    as_json = asked.script.get(f"tables/{table.pk}.json").json()
    assert as_json["digest"] == table.digest and as_json["columns"][0]["values"] == numbers.times.tolist()
    tags = set()
    for response in (as_csv, parquet, asked.script.get(f"tables/{table.pk}.json")):
        assert "immutable" in response["Cache-Control"]
        tags.add(response["ETag"])
    assert len(tags) == 3
    known = asked.script.get(f"tables/{table.pk}.parquet", If_None_Match=parquet["ETag"])
    assert known.status_code == 304


def test_a_superseded_table_says_so_and_has_another_tag(asked: Asked) -> None:
    older = asked.study.tables[0].pk
    newer = reduced(asked).json()["id"]
    before = asked.script.get(f"tables/{older}/")
    response = asked.script.post(f"tables/{older}/supersede/", {"newer": newer, "reason": "better baseline"})
    assert response.status_code == 200
    assert response.json()["superseded_by"] == {"table": newer, "reason": "better baseline"}
    after = asked.script.get(f"tables/{older}/", If_None_Match=before["ETag"])
    assert after.status_code == 200 and after.json() == response.json()
    problem(asked.script.post(f"tables/{older}/supersede/", {"newer": newer, "reason": "again"}), 409)


@pytest.mark.parametrize(
    ("body", "field"),
    [
        ({}, "newer"),
        ({"newer": None, "reason": "x"}, "newer"),
        ({"newer": 999_999, "reason": "x"}, "newer"),
        ({"newer": 1.5, "reason": "x"}, "newer"),
        ({"newer": "older", "reason": "x"}, "newer"),
        ({"newer": "same", "reason": "x"}, "newer"),
        ({"newer": "newer", "reason": " "}, "reason"),
        ({"newer": "newer", "reason": "x" * 1001}, "reason"),
        ({"newer": "newer", "reason": ["x"]}, "reason"),
        ({"newer": "newer", "reason": "x", "why": 1}, "why"),
    ],
)
def test_a_supersession_that_cannot_be_is_refused(asked: Asked, body: dict[str, Any], field: str) -> None:
    numbers = {"same": asked.study.tables[0].pk, "newer": reduced(asked).json()["id"]}
    sent = {**body, "newer": numbers.get(body.get("newer"), body.get("newer"))} if body else body
    older = asked.study.tables[0].pk
    assert field in fields_of(problem(asked.script.post(f"tables/{older}/supersede/", sent), 422))
    assert not TableSupersession.objects.exists()


def test_tables_of_a_run_are_listed_in_few_queries(asked: Asked) -> None:
    for number in range(4):
        reduced(asked, name=f"r{number}")
    run = asked.study.tables[0].run_id
    rows = costs_few_queries(asked.script, f"runs/{run}/tables/")["items"]
    assert [row["number"] for row in rows] == [5, 4, 3, 2, 1]
    assert [c["name"] for c in rows[-1]["columns"]] == ["A", "B"] and "recipe" not in rows[0]


def test_tables_are_for_members_and_written_by_contributors(asked: Asked) -> None:
    table = asked.study.tables[0]
    for path in (f"runs/{table.run_id}/tables/", f"tables/{table.pk}/", f"tables/{table.pk}.parquet"):
        hides(path)
        assert asked.reader().get(path).status_code == 200
    for missing in ("tables/999999/", "tables/999999.csv", f"tables/{10**30}/"):
        problem(asked.script.get(missing), 404)
    newer = reduced(asked).json()["id"]
    body = {"signal_table": table.signal_table_id, "name": "theirs", "recipe": RECIPE}
    asked.refuses_others(f"tables/{table.pk}/supersede/", {"newer": newer, "reason": "x"})
    asked.refuses_others(f"runs/{table.run_id}/tables/", body)
    asked.refuses_others(f"runs/{table.run_id}/tables/?preview=true", body)


def test_a_reduction_sent_twice_with_a_key_gets_its_first_answer(asked: Asked) -> None:
    table = asked.study.tables[0]
    body = {"signal_table": table.signal_table_id, "name": "again", "recipe": RECIPE}
    path = f"runs/{table.run_id}/tables/"
    first, second = (asked.script.post(path, body, Idempotency_Key="t-1") for _ in range(2))
    assert first.status_code == second.status_code == 201 and "Idempotency-Replayed" in second


@pytest.mark.parametrize("path", ["tables/{}.csv", "tables/{}.parquet", "tables/{}.json", "tables/{}/"])
def test_numbers_have_heads_without_bodies_and_say_what_they_take(asked: Asked, path: str) -> None:
    path = path.format(asked.study.tables[0].pk)
    head, whole = asked.script.ask("HEAD", path), asked.script.get(path)
    sent = b"".join(head.streaming_content) if head.streaming else head.content
    assert head.status_code == 200 and sent == b"" and head["ETag"] == whole["ETag"]
    options = asked.script.ask("OPTIONS", path)
    assert options.status_code == 200 and options["Content-Type"] == "application/json"
    assert options["Allow"] == "GET, HEAD, OPTIONS"
    for method in ("POST", "DELETE", "PUT"):
        problem(asked.script.ask(method, path, {}), 405)
