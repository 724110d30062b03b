"""The one address so far, and errors as problem details."""

from __future__ import annotations

from typing import Any

import pytest
from django.core.exceptions import PermissionDenied
from django.db import OperationalError
from django.http import Http404
from django.test import Client
from rest_framework.exceptions import ParseError
from rest_framework.test import APIRequestFactory

from api import health
from api.errors import STATUS, problem_details
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


def test_a_method_that_is_not_allowed_is_named_as_http_names_it(client: Client) -> None:
    response = client.post("/api/v1/health/")
    assert response.status_code == 405
    assert response["Content-Type"] == "application/problem+json"
    assert response.json() == {
        "title": "Method Not Allowed",
        "status": 405,
        "detail": 'Method "POST" not allowed.',
    }


def test_a_form_that_cannot_be_given_is_refused_under_a_title_of_its_own(client: Client) -> None:
    response = client.get("/api/v1/health/", headers={"accept": "text/html"})
    assert response.status_code == 406
    assert response.json()["title"] == "Not Acceptable"
    assert response.json()["detail"] != response.json()["title"]


@pytest.mark.parametrize(
    ("error", "title"),
    [
        (Http404(), STATUS[NotFound][1]),
        (PermissionDenied(), STATUS[NotPermitted][1]),
    ],
)
def test_errors_of_the_framework_have_the_titles_of_ours_where_the_status_is_the_same(
    error: Exception, title: str
) -> None:
    response = problem_details(error, {})
    assert response is not None
    assert response.data["title"] == title


@pytest.mark.parametrize("method", ["get", "post", "put", "delete", "options"])
@pytest.mark.parametrize("address", ["/api/v1/", "/api/v1/nothing/", "/api/v1/health/more/"])
def test_an_address_where_nothing_is_is_refused_as_problem_details(
    client: Client, method: str, address: str
) -> None:
    response = getattr(client, method)(address, headers={"accept": "text/html"})
    assert response.status_code == 404
    assert response["Content-Type"] == "application/problem+json"
    assert response.json() == {
        "title": "Not found",
        "status": 404,
        "detail": f"There is nothing at {address}.",
    }


def test_a_forgotten_slash_is_told(client: Client) -> None:
    detail = client.get("/api/v1/health").json()["detail"]
    assert detail == "There is nothing at /api/v1/health; addresses end with a slash."
