"""The one address so far, and errors as problem details."""

from __future__ import annotations

from typing import Any

import pytest
from django.db import OperationalError
from django.test import Client
from rest_framework.exceptions import ParseError
from rest_framework.test import APIRequestFactory

from api import health
from api.errors import problem_details
from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, Problem, Unavailable


@pytest.mark.django_db
def test_health_says_that_the_database_answers(client: Client) -> None:
    response = client.get("/api/v1/health/")
    assert response.status_code == 200
    assert response.json() == {"database": "answers", "open_jobs": 0}


def test_health_is_503_when_the_database_does_not_answer(
    client: Client, monkeypatch: pytest.MonkeyPatch
) -> None:
    def away() -> int:
        raise OperationalError("gone")

    monkeypatch.setattr(health, "open_count", away)
    assert client.get("/api/v1/health/").status_code == 503


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (InvalidInput(Problem("no such name", line=3, column=7, cure="k_1")), 422),
        (NotPermitted("no"), 403),
        (NotFound("nothing"), 404),
        (Conflict("changed"), 409),
        (Unavailable("away"), 503),
        (ParseError("broken JSON"), 400),
    ],
)
def test_an_error_becomes_problem_details(error: Exception, status: int) -> None:
    response = problem_details(error, {"request": APIRequestFactory().get("/")})
    assert response is not None and response.status_code == status
    body: dict[str, Any] = response.data
    assert body["status"] == status and body["title"] and body["detail"]
    assert response.content_type == "application/problem+json"


def test_a_problem_says_its_place_and_cure() -> None:
    error = InvalidInput(Problem("no such name", line=3, column=7, cure="k_1"))
    response = problem_details(error, {})
    assert response is not None
    assert response.data["problems"] == [{"message": "no such name", "line": 3, "column": 7, "cure": "k_1"}]
