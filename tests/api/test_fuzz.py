"""Whatever is asked: an answer in time, never a fault of the server, and nothing stored by the way."""

from __future__ import annotations

import json
import time
from collections import Counter
from dataclasses import dataclass, field, replace
from typing import Any

import pytest
from django.conf import settings
from django.test import Client

from api import pagination
from kinetics_db.accounts.selectors import user_named
from kinetics_db.provenance.selectors import head_of_record
from tests.access.endpoints import ENDPOINTS
from tests.access.world import make_world, undone
from tests.api.fuzzing import NOT_DESCRIBED, Choice, Operation, Try, operations_of, tries
from tests.api.hostile_requests import MANY, cursor_of

# What is asked does not hang on the database; the second pass on SQLite need not repeat it.
pytestmark = pytest.mark.postgresql

GOOD = (200, 201, 202, 204)
REFUSED = (400, 401, 403, 404, 405, 406, 409, 412, 413, 415, 422, 428)
UNDECLARED = {304, 406}
"""Answers to a reader's own wishes, which any operation may give."""
LONGEST_CPU = 2.0
"""Seconds of this process that one answer may take."""
LARGEST_PROBLEM = MANY // 2
"""Bytes: what was sent is not sent back."""


@pytest.fixture
def every_operation(db: None) -> list[Operation]:
    found = operations_of(make_world())[1]
    assert len(found) == sum(len(ENDPOINTS[name]) for name in ENDPOINTS if name not in NOT_DESCRIBED)
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


def complaints_of(hands: Hands, operations: list[Operation], choice: Choice) -> Counter[int]:
    """How often each status was answered; fails with what was wrong."""
    complaints: list[str] = []
    statuses: Counter[int] = Counter()
    for operation in operations:
        for one in tries(operation, choice):
            status, why = judged(hands, one)
            statuses[status] += 1
            complaints += [f"{operation.title}, {one.what}: {what}" for what in why]
    assert not complaints, f"{len(complaints)} of {statuses.total()}\n" + "\n".join(complaints[:200])
    return statuses


def test_every_operation_answers_whatever_is_asked(hands: Hands, every_operation: list[Operation]) -> None:
    statuses = complaints_of(hands, every_operation, Choice())
    assert statuses.total() > 2_000
    assert {200, 201, 202, 304, 400, 401, 404, 406, 412, 415, 422} <= set(statuses)


@pytest.mark.slow
@pytest.mark.timeout(1800)
def test_every_operation_answers_everything(hands: Hands, every_operation: list[Operation]) -> None:
    """Every hostile thing in every place."""
    assert complaints_of(hands, every_operation, Choice(thorough=True)).total() > 15_000


def test_cursors_that_were_tampered_with_are_refused_or_open_nothing_new(
    hands: Hands, every_operation: list[Operation], monkeypatch: pytest.MonkeyPatch
) -> None:
    orders: list[tuple[str, ...]] = []
    page_of = pagination.page_of
    monkeypatch.setattr(
        pagination, "page_of", lambda rows, **more: (orders.append(more["order"]), page_of(rows, **more))[1]
    )
    tried = 0
    for operation in every_operation:
        if "cursor" in operation.parameters("query"):
            good = operation.good()
            mark = "&" if "?" in good.path else "?"
            judged(hands, replace(good, path=f"{good.path}{mark}size=7"))
            for cursor in tampered(orders[-1]):
                one = replace(
                    good, what=f"cursor {cursor}", path=f"{good.path}{mark}cursor={cursor_of(cursor)}"
                )
                status, why = judged(hands, one)
                assert status in (200, 422) and not why, (operation.title, one.what, why)
                tried += 1
    assert tried > 200


def tampered(order: tuple[str, ...]) -> list[Any]:
    """What a cursor of that order never says."""
    values = ([{}, 1], ["x", "y"], [None, None], [True, False], [1e308, 10**30], ["0001-01-01T00:00+23:59", 1],
              ["9999-12-31T23:59:59-23:59", 0], ["\0", 1], ["\ud800", 1], [-(2**63), 2**63 - 1], [2**62, -1], [[], []],
              ["2026-01-01", 1], ["2026-01-01T00:00:00Z", 1.5], ["x" * 900, 1], [1, 2, 3], "xy", 7, None)  # fmt: skip
    ways = ("before", "after")
    return [*([way, list(order), value] for way in ways for value in values), ["beside", list(order), None]]


@pytest.mark.parametrize("host", ["elsewhere.example", "a b", "[::", "\xe9.example", "x" * 5000])
def test_a_host_that_this_server_is_not_is_refused_as_a_problem(hands: Hands, host: str) -> None:
    response = hands.send("GET", "/api/v1/projects/", Host=host)
    assert response.status_code == 400 and not problems_of(response, response.content)
    page = hands.send("GET", "/", Host=host)
    assert page.status_code == 400 and page["Content-Type"].startswith("text/html")


def test_more_than_a_request_may_hold_is_refused_in_time(hands: Hands) -> None:
    huge = b'{"name": "' + b"x" * (settings.DATA_UPLOAD_MAX_MEMORY_SIZE + 1) + b'"}'
    many = "&".join(f"p{i}=1" for i in range(settings.DATA_UPLOAD_MAX_NUMBER_FIELDS + 1))
    for status, response in (
        (413, hands.send("POST", "/api/v1/projects/", huge, "application/json")),
        (400, hands.send("GET", f"/api/v1/projects/?{many}")),
        (404, hands.send("GET", "/api/v1/" + "x" * MANY)),
    ):
        assert response.status_code == status and not problems_of(response, response.content)


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
    declared = {int(status) for status in one.operation.described["responses"]}
    if response.status_code not in declared | UNDECLARED and one.operation.described["tags"] != ["about"]:
        wrong.append(f"{response.status_code} is not described")
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
