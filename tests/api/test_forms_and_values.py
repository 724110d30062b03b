"""Forms with files under a key, and values read from a body by name."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.test import override_settings
from rest_framework.response import Response
from rest_framework.test import APIRequestFactory, force_authenticate

from api.base import ApiView
from api.bodies import Body, Quantity
from api.parsers import FORM_BYTES, FileParser
from kinetics_db.accounts.models import User
from kinetics_db.errors import InvalidInput
from tests.factories.people import make_user


class Files(ApiView):
    parser_classes = (FileParser,)
    throttle_classes = ()
    stored: list[tuple[str, bytes, list[str]]] = []

    def post(self, request: Any) -> Response:
        file = request.FILES["file"]
        self.stored.append((file.name, file.read(), request.data.getlist("note")))
        return Response({"size": file.size}, status=201)


@pytest.fixture
def person(db: None) -> User:
    Files.stored.clear()
    return make_user()


def send(person: User, data: bytes, *, name: str = "a.txt", notes: tuple[str, ...] = ("x",)) -> Any:
    form = {"file": SimpleUploadedFile(name, data), "note": list(notes)}
    request = APIRequestFactory().post("/", form, format="multipart", headers={"Idempotency-Key": "k-1"})
    force_authenticate(request, person)
    response = Files.as_view()(request)
    request.close()  # as the server does, with its temporary files
    return response.render() if hasattr(response, "render") else response


def test_the_same_file_under_the_same_key_is_stored_once_and_whole(person: User) -> None:
    large = bytes(range(256)) * 20_000  # more than stays in memory
    assert send(person, large, notes=("x", "y")).status_code == 201
    assert send(person, large, notes=("x", "y"))["Idempotency-Replayed"] == "true"
    assert Files.stored == [("a.txt", large, ["x", "y"])]


@pytest.mark.parametrize("change", [{"data": b"2"}, {"name": "b.txt"}, {"notes": ("z", "x")}])
def test_another_file_name_or_field_under_the_same_key_is_refused(
    person: User, change: dict[str, Any]
) -> None:
    send(person, b"1")
    assert send(person, **{"data": b"1", **change}).status_code == 422
    assert len(Files.stored) == 1


@override_settings(MAX_FILE_BYTES=10)
def test_a_form_that_is_too_large_is_refused_before_it_is_read(person: User) -> None:
    assert send(person, b"x" * (FORM_BYTES + 10)).status_code == 413
    assert Files.stored == []


def test_a_form_that_breaks_off_is_refused(person: User) -> None:
    request = APIRequestFactory().post("/", b"--x\r\n", content_type="multipart/form-data; boundary=\xff")
    force_authenticate(request, person)
    assert Files.as_view()(request).status_code == 400


def test_values_are_read_as_what_they_are() -> None:
    body = Body({"n": 3, "t": True, "x": 2, "q": {"value": 1, "unit": "g", "uncertainty": 0.1}, "p": [1],
                 "at": "2026-03-31T12:00:00Z", "list": [{"a": "b"}], "none": None})  # fmt: skip
    assert (body.whole("n"), body.truth("t"), body.number("x")) == (3, True, 2.0)
    assert body.quantity("q", uncertain=True) == Quantity(1.0, "g", 0.1)
    assert body.time("at") == datetime(2026, 3, 31, 12, tzinfo=UTC)
    assert [part.text("a") for part in body.objects("list")] == ["b"]
    assert body.plain("p") == [1] and body.number("none", 5.0) == 5.0 and body.whole("absent") is None
    body.done()


def test_all_wrong_values_are_told_with_their_places() -> None:
    body = Body({"n": 1.5, "t": 1, "x": True, "at": "", "list": [{"a": 1}, 2], "long": [0] * 1001, "more": 1})
    body.whole("n"), body.truth("t"), body.number("x"), body.time("at", required=True)
    for part in body.objects("list"):
        part.text("a")
    body.texts("long"), body.text("missing", required=True)
    with pytest.raises(InvalidInput) as caught:
        body.done()
    fields = [p.field for p in caught.value.problems]
    assert sorted(map(str, fields)) == ["at", "list.1.a", "list.2", "long", "missing", "more", "n", "t", "x"]
