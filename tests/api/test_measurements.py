"""Instrument files and signals over REST."""

from __future__ import annotations

import json
import re
from typing import Any

import pytest
from django.test import override_settings

from kinetics_db.engine.reading import read
from kinetics_db.measurements.models import InstrumentFile, SignalTable
from tests.api.conftest import Lab, problem
from tests.api.study import Asked, costs_few_queries, fields_of, form, hides

TEXT = b"t / s,A / mM,remark\n0,10.0,x\n10,,y\n20,2.5,z\n"
OPTIONS = json.dumps({"ignored_columns": ["remark"]})


def sent(lab: Lab, data: bytes = TEXT, *, query: str = "", run: int = 0, **texts: str) -> Any:
    texts.setdefault("options", OPTIONS)
    body, more = form(data, **texts)
    return lab.script.post(f"runs/{run or lab.logged()['id']}/files/{query}", body, **more)


def test_a_file_is_read_and_nothing_is_kept(lab: Lab) -> None:
    response = sent(lab)
    body = response.json()
    assert response.status_code == 200 and "Location" not in response
    assert body["columns"] == [
        {"name": "t", "unit": "s", "quantity": "time"},
        {"name": "A", "unit": "mM", "quantity": "signal"},
    ]
    assert body["rows"] == 3 and (body["first_time"], body["last_time"]) == (0.0, 20.0)
    assert body["first_rows"] == [[0.0, 10.0], [10.0, None], [20.0, 2.5]]
    assert body["options"] == {"ignored_columns": ["remark"]} and body["notes"]
    assert body["file"] is body["signal_table"] is None
    assert not InstrumentFile.objects.exists()


def test_a_stored_file_is_there_with_its_bytes_and_its_signals(lab: Lab) -> None:
    run = lab.logged()["id"]
    response = sent(lab, query="?store=true", run=run, name="K01.csv")
    assert response.status_code == 201
    signals = lab.script.get(response["Location"].removeprefix("/api/v1/")).json()
    file = lab.script.get(f"files/{response.json()['file']}/").json()
    assert signals["id"] == response.json()["signal_table"] and signals["file"] == file["id"]
    assert signals["file_name"] == file["name"] == "K01.csv" and signals["run"] == file["run"] == run
    assert signals["columns"] == response.json()["columns"] and signals["rows"] == 3
    assert signals["options"] == {"ignored_columns": ["remark"]} and signals["created_by"] == "mira"
    assert file["size"] == len(TEXT) and len(file["sha256"]) == 64
    assert [table["id"] for table in file["signal_tables"]] == [signals["id"]]
    content = lab.script.get(f"files/{file['id']}/content/")
    assert content.content == TEXT and content["Content-Type"] == "application/octet-stream"
    assert content["Content-Disposition"] == 'attachment; filename="K01.csv"'
    assert "immutable" in content["Cache-Control"]
    again = lab.script.get(f"files/{file['id']}/content/", If_None_Match=content["ETag"])
    assert again.status_code == 304 and again.content == b""


def test_the_same_file_read_in_the_same_way_is_kept_once(lab: Lab) -> None:
    run = lab.logged()["id"]
    first, second = (sent(lab, query="?store=true", run=run) for _ in range(2))
    assert (first.status_code, second.status_code) == (201, 200)
    assert second.json() == first.json() and second["Location"] == first["Location"]
    other = sent(
        lab,
        query="?store=true",
        run=run,
        options=json.dumps({"ignored_columns": ["remark"], "time_unit": "min"}),
    )
    assert other.status_code == 201 and other.json()["file"] == first.json()["file"]
    assert (SignalTable.objects.count(), InstrumentFile.objects.count()) == (2, 1)


def test_a_file_sent_twice_with_a_key_is_kept_once(lab: Lab) -> None:
    run = lab.logged()["id"]
    body, more = form(TEXT, options=OPTIONS)
    path = f"runs/{run}/files/?store=true"
    first, second = (lab.script.post(path, body, Idempotency_Key="f-1", **more) for _ in range(2))
    assert first.status_code == second.status_code == 201 and second["Idempotency-Replayed"] == "true"
    assert second.json() == first.json()
    other, more = form(TEXT + b"30,1.0,w\n", options=OPTIONS)
    problem(lab.script.post(path, other, Idempotency_Key="f-1", **more), 422)


def test_signals_are_numbers_in_three_forms(lab: Lab) -> None:
    number = sent(lab, query="?store=true").json()["signal_table"]
    columns = lab.script.get(f"signals/{number}.json").json()["columns"]
    assert columns[1] == {"name": "A", "unit": "mM", "values": [10.0, None, 2.5]}
    csv = lab.script.get(f"signals/{number}.csv")
    text = b"".join(csv.streaming_content)
    assert csv["Content-Type"] == "text/csv; charset=utf-8"
    assert text == b"t / s,A / mM\r\n0.0,10.0\r\n10.0,\r\n20.0,2.5\r\n"
    assert read(text).table.column("A", "signal").tolist()[::2] == [10.0, 2.5]
    by_accept = lab.script.get(f"signals/{number}/", Accept="text/csv")
    assert b"".join(by_accept.streaming_content) == text and by_accept["ETag"] == csv["ETag"]
    assert lab.script.get(f"signals/{number}.parquet").content[:4] == b"PAR1"
    assert problem(lab.script.get(f"signals/{number}.xls"), 404)["detail"].endswith("json, csv, parquet")
    problem(lab.script.get(f"signals/{number}/", Accept="image/png"), 406)


@pytest.mark.parametrize(
    ("texts", "field"),
    [
        ({"options": '{"decimal": ";"}'}, "decimal"),
        ({"options": '{"hope": 1}'}, "hope"),
        ({"options": '{"encoding": 3}'}, "encoding"),
        ({"options": "{"}, "options"),
        ({"options": "[]"}, "options"),
        ({"options": '{"a": NaN}'}, "options"),
        ({"options": "[" * 5000}, "options"),
        ({"options": '{"decimal": "\\u0000"}'}, "options"),
        ({"reader": "oracle"}, "reader"),
        ({"reader": "\x00"}, "reader"),
        ({"colour": "red"}, "colour"),
    ],
)
def test_what_a_form_states_wrongly_is_refused_with_its_field(
    lab: Lab, texts: dict[str, str], field: str
) -> None:
    assert field in fields_of(problem(sent(lab, query="?store=true", **texts), 422))
    assert not InstrumentFile.objects.exists()


@pytest.mark.parametrize("name", ["a/../b\x07.csv", "x" * 300])
def test_a_name_that_no_file_may_have_is_refused(lab: Lab, name: str) -> None:
    response = sent(lab, query="?store=true", name=name)
    assert fields_of(problem(response, 422)) == ["name"] and not InstrumentFile.objects.exists()


def test_broken_options_are_told_with_their_line_and_column(lab: Lab) -> None:
    (found,) = problem(sent(lab, options='{"decimal":\n ","'), 422)["problems"]
    assert (found["field"], found["line"]) == ("options", 2) and found["column"] > 1


@pytest.mark.parametrize("data", [b"", b"\x00\x01\x02", b"hello", b"t,A\n0,x\n", b"\xff\xfe\x00" * 50])
def test_a_file_that_cannot_be_read_is_refused_and_not_kept(lab: Lab, data: bytes) -> None:
    assert problem(sent(lab, data, query="?store=true", options=""), 422)["problems"]
    assert not InstrumentFile.objects.exists()


def test_what_is_wrong_in_a_file_is_told_with_its_line(lab: Lab) -> None:
    found = problem(sent(lab, b"t / s,A / mM\n0,1\n10,abc\n", options=""), 422)["problems"]
    assert [p["line"] for p in found] == [3]


def test_a_form_needs_one_file(lab: Lab) -> None:
    run = lab.logged()["id"]
    body, more = form(TEXT)
    without = body.replace(b'name="file"; filename="run.csv"', b'name="reader"')
    assert "file" in fields_of(problem(lab.script.post(f"runs/{run}/files/", without, **more), 422))
    part = body[: body.rindex(b"--" + more["content_type"].split("=")[1].encode())]
    assert "file" in fields_of(problem(lab.script.post(f"runs/{run}/files/", part + body, **more), 422))


def test_a_body_that_is_no_form_is_refused(lab: Lab) -> None:
    run = lab.logged()["id"]
    problem(lab.script.post(f"runs/{run}/files/", {"file": "x"}), 415)
    problem(lab.script.post(f"runs/{run}/files/", b"x", content_type="multipart/form-data"), 400)
    problem(lab.script.post(f"runs/{run}/files/", b"x", content_type="multipart/form-data; boundary=ü"), 400)


@override_settings(MAX_FILE_BYTES=20)
def test_a_file_that_is_too_large_is_refused(lab: Lab) -> None:
    assert "20 bytes" in problem(sent(lab), 413)["detail"]


def test_store_is_true_or_false(lab: Lab) -> None:
    run = lab.logged()["id"]
    assert fields_of(problem(sent(lab, query="?store=maybe", run=run), 422)) == ["store"]
    assert fields_of(problem(sent(lab, query="?keep=true", run=run), 422)) == ["keep"]


def test_files_of_a_run_are_listed_in_few_queries(lab: Lab) -> None:
    run = lab.logged()["id"]
    for number in range(4):
        sent(lab, TEXT + f"{30 + number},1,w\n".encode(), query="?store=true", run=run, name=f"f{number}.csv")
    rows = costs_few_queries(lab.script, f"runs/{run}/files/")["items"]
    assert [row["name"] for row in rows] == ["f3.csv", "f2.csv", "f1.csv", "f0.csv"]
    page = lab.script.get(f"runs/{run}/files/?size=1")
    assert len(page.json()["items"]) == 1 and 'rel="next"' in page["Link"]


@pytest.mark.django_db
def test_files_are_for_members_and_written_by_contributors() -> None:
    asked = Asked.fresh()
    table = asked.study.tables[0]
    signals = table.signal_table
    for path in (
        f"runs/{table.run_id}/files/",
        f"files/{signals.file_id}/",
        f"files/{signals.file_id}/content/",
        f"signals/{signals.pk}/",
        f"signals/{signals.pk}.csv",
    ):
        hides(path)
        assert asked.reader().get(path).status_code == 200
        problem(asked.script.get(re.sub(r"\d+", "999999", path)), 404)
    body, more = form(TEXT)
    asked.refuses_others(f"runs/{table.run_id}/files/", body, **more)
    asked.refuses_others(f"runs/{table.run_id}/files/?store=true", body, **more)
