"""Bodies that no lab sends: each is refused with the place, none is a fault of the server."""

from __future__ import annotations

import json

import pytest
from django.test import override_settings

from api.exceptions import MalformedBody
from api.parsers import DEEPEST, strict_json
from kinetics_db.projects.models import Project
from tests.api.conftest import Lab, problem


@pytest.mark.parametrize(
    ("text", "place", "says"),
    [
        (b'{"name": "x"', (1, 13), "not JSON"),
        (b'{\n  "name": x\n}', (2, 11), "not JSON"),
        (b'{\n  "name": NaN}', (2, 11), "NaN is no JSON"),
        (b'{"a": "NaN", "b": -Infinity}', (1, 19), "-Infinity is no JSON"),
        (b'{"a": 1e999}', (1, 7), "too large"),
        (b'{"a": -1e301}', (1, 7), "too large"),
        (b'{"a": 9007199254740993}', (1, 7), "too large for a whole number"),
        (b'{"a": ' + b"9" * 5000 + b"}", (1, 7), "too large for a whole number"),
        (b'{"a": "x\ny"}', (1, 9), "not JSON"),
        (b"\xef\xbb\xbf{}", (1, 1), "not JSON"),
        (b"", (1, 1), "not JSON"),
    ],
)
def test_a_broken_body_is_refused_with_line_and_column(
    text: bytes, place: tuple[int, int], says: str
) -> None:
    with pytest.raises(MalformedBody) as caught:
        strict_json(text)
    (found,) = caught.value.problems
    assert says in found.message
    assert (found.line, found.column) == place


@pytest.mark.parametrize(
    ("text", "field"),
    [
        (b'{"name": "a", "name": "b"}', "name"),
        (b'{"a": {"b": [{"c": 1, "c": 2}]}}', "c"),
        (b'{"charges": [1, {"note": "a\\u0000b"}]}', "charges.2.note"),
        (b'{"a": "\\ud800"}', "a"),
        (b'{"a\\u0000": 1}', "a name"),
    ],
)
def test_what_no_database_holds_is_refused_with_its_field(text: bytes, field: str) -> None:
    with pytest.raises(MalformedBody) as caught:
        strict_json(text)
    assert caught.value.problems[0].field == field


@pytest.mark.parametrize("text", [b"[]", b'"x"', b"3", b"null", b"true"])
def test_a_body_that_is_no_object_is_refused(text: bytes) -> None:
    with pytest.raises(MalformedBody, match="not an object"):
        strict_json(text)


@pytest.mark.parametrize("depth", [DEEPEST + 1, 500, 200_000])
@pytest.mark.parametrize("brackets", [(b"[", b"]"), (b'{"a":', b"}")])
def test_depth_without_end_is_refused(depth: int, brackets: tuple[bytes, bytes]) -> None:
    opened, closed = brackets
    with pytest.raises(MalformedBody, match="nested too deeply"):
        strict_json(b'{"a":' + opened * depth + b"1" + closed * depth + b"}")


def test_invalid_utf_8_is_refused_with_its_byte() -> None:
    with pytest.raises(MalformedBody, match="byte 10 is no UTF-8"):
        strict_json(b'{"name": \xff}')


def test_what_is_well_formed_is_read_as_it_stands() -> None:
    text = '{"a": [1, 2.5, -0.0, 1e-5, null, true], "ü": "NaN \\\\u0000 \\ud83d\\ude00", "b": {"a": 9007199254740992}}'
    assert strict_json(text.encode()) == json.loads(text)


@pytest.mark.parametrize(
    "text", [b"{", b'{"slug": NaN}', b'{"slug": "\\u0000"}', b"[1]", b"\xff", b'{"a":' * 5000]
)
def test_a_broken_body_is_a_400_with_problem_details(lab: Lab, text: bytes) -> None:
    body = problem(lab.script.post("projects/", text), 400)
    assert body["problems"][0]["message"]


def test_a_body_of_another_media_type_is_refused(lab: Lab) -> None:
    problem(lab.script.post("projects/", b"a=1", content_type="application/x-www-form-urlencoded"), 415)
    problem(lab.script.post("projects/", b"<a/>", content_type="text/xml"), 415)
    problem(lab.script.post("projects/", b"{}", content_type="nonsense"), 415)


@override_settings(DATA_UPLOAD_MAX_MEMORY_SIZE=1000)
def test_a_body_that_is_too_large_is_refused(lab: Lab) -> None:
    body = {"slug": "x", "name": "x", "description": "x" * 1000}
    assert "1,000 bytes" in problem(lab.script.post("projects/", body), 413)["detail"]


@pytest.mark.parametrize(
    ("body", "fields"),
    [
        ({}, {"slug", "name"}),
        ({"slug": 3, "name": None}, {"slug", "name"}),
        ({"slug": "ok", "name": "x", "colour": "red", "and": {}}, {"colour", "and"}),
        ({"slug": "Not OK", "name": "x"}, {"slug"}),
        ({"slug": "ok", "name": "x" * 201}, {"name"}),
        ({"slug": "ok", "name": "x", "description": ["x"]}, {"description"}),
    ],
)
def test_every_wrong_value_is_named_at_once(lab: Lab, body: dict[str, object], fields: set[str]) -> None:
    problems = problem(lab.script.post("projects/", body), 422)["problems"]
    assert {p["field"] for p in problems} == fields
    assert Project.objects.count() == 1


@pytest.mark.parametrize(
    "path",
    ["projects/?cursor=%00", "runs/?code=%00", "runs/?project=%00x", "tokens/?%00=1",
     "projects/hydrolysis/compounds/?name=%00"],
)  # fmt: skip
def test_characters_that_cannot_be_stored_are_refused_in_addresses(lab: Lab, path: str) -> None:
    assert problem(lab.script.get(path), 422)["problems"]


@pytest.mark.parametrize(
    "path",
    [
        "projects/hydrolysis/members/a%00b/",
        "runs/99999999999999999999999/",
        "runs/1/revisions/9" + "9" * 30 + "/",
    ],
)
def test_places_that_cannot_be_are_not_there(lab: Lab, path: str) -> None:
    method = "PUT" if "members" in path else "GET"
    problem(lab.script.ask(method, path, {"role": "reader"} if method == "PUT" else None), 404)
