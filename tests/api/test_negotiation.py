"""Tables in the form asked for, by Accept or by the address's ending."""

from __future__ import annotations

import csv
import io
import json
from typing import Any

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from rest_framework.test import APIRequestFactory

from api.base import ApiView
from api.negotiation import PARQUET, TABLE_RENDERERS, Tabular, tabular
from kinetics_db.exchange.tidy import TidyColumn as Column

TABLE = Tabular(
    (
        Column("time", np.array([0.0, 0.1, 1e-30]), "s"),
        Column("=ester", [1.0, float("nan"), None], "mol/L"),
        Column("note", ["", "=1+1", 'two, "words"\nx']),
        Column("left out", [True, False, False]),
    ),
    {"run": "K01", "revision": 3},
)


class Table(ApiView):
    renderer_classes = TABLE_RENDERERS
    authentication_classes = ()
    permission_classes = ()
    throttle_classes = ()

    def get(self, request: Any, format: str | None = None) -> Any:
        return self.conditional(
            request, lambda: tabular(request, TABLE), etag_over=("digest",), immutable=True
        )


def answer(*, ending: str | None = None, **headers: str) -> Any:
    response = Table.as_view()(APIRequestFactory().get("/", headers=headers), format=ending)
    return response.render() if hasattr(response, "render") else response


def content(response: Any) -> bytes:
    return b"".join(response.streaming_content) if response.streaming else bytes(response.content)


def test_json_holds_null_for_what_is_missing() -> None:
    body = json.loads(answer().content)
    assert body["run"] == "K01" and body["revision"] == 3
    assert body["columns"][1] == {"name": "=ester", "unit": "mol/L", "values": [1.0, None, None]}


@pytest.mark.parametrize("asked", [{"ending": "csv"}, {"accept": "text/csv"}])
def test_csv_keeps_all_digits_and_no_formulas(asked: dict[str, Any]) -> None:
    response = answer(**asked)
    assert response["Content-Type"] == "text/csv; charset=utf-8"
    text = content(response).decode()
    assert text.count("\r\n") == 4
    rows = list(csv.reader(io.StringIO(text, newline="")))
    assert rows[0] == ["time / s", "'=ester / (mol/L)", "note", "left out"]
    assert rows[1:] == [
        ["0.0", "1.0", "", "true"],
        ["0.1", "", "'=1+1", "false"],
        ["1e-30", "", 'two, "words"\nx', "false"],
    ]


@pytest.mark.parametrize("asked", [{"ending": "parquet"}, {"accept": PARQUET}])
def test_parquet_is_read_by_pandas_and_keeps_units(asked: dict[str, Any]) -> None:
    response = answer(**asked)
    assert response["Content-Type"] == PARQUET
    frame = pd.read_parquet(io.BytesIO(response.content))
    assert list(frame.columns) == ["time", "=ester", "note", "left out"]
    assert frame["time"].tolist() == [0.0, 0.1, 1e-30] and frame["=ester"].isna().tolist() == [
        False,
        True,
        True,
    ]
    assert frame["note"].tolist()[1] == "=1+1" and frame["left out"].tolist() == [True, False, False]
    schema = pq.read_schema(io.BytesIO(response.content))
    assert schema.field("time").metadata == {b"unit": b"s"}
    assert schema.metadata[b"run"] == b'"K01"' and schema.metadata[b"revision"] == b"3"


def test_each_form_has_a_tag_of_its_own() -> None:
    tags = {answer(ending=ending)["ETag"] for ending in ("json", "csv", "parquet")}
    assert len(tags) == 3
    for ending in ("json", "csv", "parquet"):
        etag = answer(ending=ending)["ETag"]
        known = answer(ending=ending, if_none_match=etag)
        assert known.status_code == 304 and known.content == b"" and "immutable" in known["Cache-Control"]


def test_a_form_that_is_not_there_is_a_problem_in_json() -> None:
    for response, status in ((answer(ending="xls"), 404), (answer(accept="text/html"), 406)):
        assert response.status_code == status
        assert json.loads(response.content)["status"] == status
