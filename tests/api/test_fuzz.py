"""Whatever is asked: an answer in time, never a fault of the server, and nothing stored by the way."""

from __future__ import annotations

import json
import re
import time
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

import pytest
from django.conf import settings
from django.test import Client
from drf_spectacular.generators import SchemaGenerator

from api.urls import urlpatterns
from kinetics_db.accounts.selectors import user_named
from kinetics_db.provenance.selectors import head_of_record
from tests.access.endpoints import ENDPOINTS
from tests.access.world import make_world, undone
from tests.api.fuzzing import MANY, Operation, Try, operations, tries
from tests.factories.people import make_member

GOOD = (200, 201, 202, 204)
REFUSED = (400, 401, 403, 404, 405, 406, 409, 412, 413, 415, 422, 428)
LONGEST_CPU = 2.0
"""Seconds of this process that one answer may take."""
LARGEST_PROBLEM = MANY // 2
"""Bytes: what was sent is not sent back."""


def description() -> dict[str, Any]:
    return dict(json.loads(json.dumps(SchemaGenerator().get_schema(request=None, public=True), default=str)))


def templates() -> dict[str, str]:
    """Addresses as the description has them, by the names of endpoints; of every one that is described."""
    named = {p.name: "/api/v1/" + re.sub(r"<\w+:(\w+)>", r"{\1}", str(p.pattern)) for p in urlpatterns}
    return {name: path for name, path in named.items() if name not in ("docs", "elsewhere")}


@pytest.fixture
def every_operation(db: None) -> list[Operation]:
    world = make_world()
    make_member(world.study.project, "reader", "nina")
    keys = {**world.keys, "username": "nina", "number": 1, "form": "csv", "token_id": 1}
    found = operations(description(), keys, templates())
    assert len(found) == sum(
        len(methods) for name, methods in ENDPOINTS.items() if name not in ("docs", "elsewhere")
    )
    return found


@dataclass(frozen=True)
class Hands:
    """Somebody who is logged in, whatever the answers do to the cookies."""

    session: str
    client: Client = field(default_factory=lambda: Client(raise_request_exception=False))

    def send(self, verb: str, path: str, body: bytes = b"", content_type: str = "", **headers: str) -> Any:
        self.client.cookies[settings.SESSION_COOKIE_NAME] = self.session
        return self.client.generic(verb, path, body, content_type, headers=headers)


@pytest.fixture
def hands(every_operation: list[Operation]) -> Hands:
    client = Client()
    client.force_login(user_named("mira"))
    return Hands(client.cookies[settings.SESSION_COOKIE_NAME].value)


def test_every_operation_answers_whatever_is_asked(hands: Hands, every_operation: list[Operation]) -> None:
    complaints: list[str] = []
    statuses: Counter[int] = Counter()
    for operation in every_operation:
        for one in tries(operation):
            status, why = judged(hands, one)
            statuses[status] += 1
            complaints += [f"{operation.verb} {operation.template}, {one.what}: {what}" for what in why]
    assert not complaints, f"{len(complaints)} of {statuses.total()}\n" + "\n".join(complaints[:60])
    assert statuses.total() > 4_000 and {200, 201, 400, 401, 404, 406, 415, 422} <= set(statuses)


def judged(hands: Hands, one: Try) -> tuple[int, list[str]]:
    """The status of the answer, and what is wrong with it."""
    with undone():
        before, begun = head_of_record(), time.process_time()
        response = hands.send(one.operation.verb, one.path, one.body, one.content_type, **one.headers)
        content = b"".join(response) if response.streaming else response.content
        taken, wrote = time.process_time() - begun, head_of_record() != before
        wrong = [f"took {taken:.1f} s"] if taken > LONGEST_CPU else []
        if wrote and (one.operation.verb == "GET" or response.status_code not in GOOD):
            wrong.append(f"{response.status_code}, but something was written")
        if response.status_code in (200, 201, 202) and response.has_header("Location"):
            there = hands.send("GET", response["Location"])
            if there.status_code != 200:
                wrong.append(f"{response['Location']} is {there.status_code}")
    return response.status_code, [*wrong, *problems_of(response, content)]


def problems_of(response: Any, content: bytes) -> list[str]:
    status = response.status_code
    if status in GOOD or status == 304:
        return []
    if status not in REFUSED:
        return [f"{status}: {content[:200]!r}"]
    if response["Content-Type"] != "application/problem+json":
        return [f"{status} is {response['Content-Type']}"]
    body = json.loads(content)
    wrong = [] if body["status"] == status else ["says another status than it has"]
    wrong += [
        f"has no {name}" for name in ("title", "detail") if not isinstance(body[name], str) or not body[name]
    ]
    wrong += ["problems without message"] * any(not p["message"] for p in body.get("problems", ()))
    wrong += [f"{len(content)} bytes of problem"] * (len(content) > LARGEST_PROBLEM)
    if status == 401 and not response["WWW-Authenticate"].startswith("Bearer"):
        wrong.append("does not say how to log in")
    if status == 422 and not body["problems"]:
        wrong.append("names no problem")
    return wrong
