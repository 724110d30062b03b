"""What every endpoint keeps: pages with links, ETags, rates, forms of an answer, errors that tell nothing."""

from __future__ import annotations

import re

import pytest
from django.db import OperationalError
from django.http import UnreadablePostError
from django.test import override_settings

from api import projects, throttling
from api.errors import problem_details
from tests.api.conftest import Lab, Script, problem
from tests.factories.people import make_project


def link(response: object, rel: str) -> str:
    """The address of a Link header, below the prefix; empty when there is none."""
    header = response.get("Link", "")  # type: ignore[attr-defined]
    found = re.search(rf'<http://testserver/api/v1/([^>]+)>; rel="{rel}"', header)
    return found.group(1) if found else ""


def test_pages_are_walked_by_their_links_to_the_end_and_back(lab: Lab) -> None:
    for number in range(4):
        make_project(lab.owner, f"p-{number}")
    first = lab.script.get("projects/?size=2")
    assert [p["slug"] for p in first.json()["items"]] == ["hydrolysis", "p-0"]
    assert set(first.json()) == {"items"} and not link(first, "prev")
    second = lab.script.get(link(first, "next"))
    assert [p["slug"] for p in second.json()["items"]] == ["p-1", "p-2"]
    last = lab.script.get(link(second, "next"))
    assert [p["slug"] for p in last.json()["items"]] == ["p-3"] and not link(last, "next")
    assert lab.script.get(link(last, "prev")).json() == second.json()


def test_links_keep_the_filters_of_their_list(lab: Lab) -> None:
    for code in ("K01", "K02", "X01"):
        lab.logged(code)
    first = lab.script.get("runs/?code=K&size=1&order=code")
    second = lab.script.get(link(first, "next"))
    assert [r["code"] for r in second.json()["items"]] == ["K02"] and not link(second, "next")


@pytest.mark.parametrize("size", ["0", "201", "-1", "x", "1.5", "", "²", "9" * 5000])
def test_a_size_that_cannot_be_is_refused(lab: Lab, size: str) -> None:
    assert problem(lab.script.get(f"projects/?size={size}"), 422)["problems"][0]["field"] == "size"


@pytest.mark.parametrize("cursor", ["x", "%20", "WzFd", "A" * 5000])
def test_a_cursor_that_is_none_is_refused(lab: Lab, cursor: str) -> None:
    assert problem(lab.script.get(f"projects/?cursor={cursor}"), 422)["problems"][0]["field"] == "cursor"


def test_a_mistyped_parameter_is_refused_with_those_there_are(lab: Lab) -> None:
    (found,) = problem(lab.script.get("projects/?sise=3"), 422)["problems"]
    assert found["field"] == "sise" and found["cure"] == "cursor, size"


def test_an_answer_that_is_known_is_not_sent_again(lab: Lab) -> None:
    first = lab.script.get("projects/hydrolysis/")
    assert first["Cache-Control"] == "private, no-cache"
    assert re.fullmatch(r'"[0-9a-f]+"', first["ETag"])
    for known in (first["ETag"], f'"x", W/{first["ETag"]}', "*"):
        again = lab.script.get("projects/hydrolysis/", If_None_Match=known)
        assert again.status_code == 304 and again.content == b"" and again["ETag"] == first["ETag"]
    assert lab.script.get("projects/hydrolysis/", If_None_Match='"other"').status_code == 200


def test_a_changed_answer_has_another_tag(lab: Lab) -> None:
    before = lab.script.get("projects/")["ETag"]
    make_project(lab.owner, "another")
    assert lab.script.get("projects/", If_None_Match=before).status_code == 200


def test_answers_are_kept_apart_by_form_and_person(lab: Lab) -> None:
    vary = {name.strip() for name in lab.script.get("projects/")["Vary"].split(",")}
    assert {"Accept", "Authorization", "Cookie"} <= vary


def test_head_is_get_without_its_body(lab: Lab) -> None:
    response = lab.script.ask("HEAD", "projects/")
    assert response.status_code == 200 and response.content == b""


@override_settings(API_REQUESTS_A_MINUTE=3, API_ANONYMOUS_A_MINUTE=2)
def test_haste_is_refused_with_the_time_to_wait(lab: Lab, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(throttling.time, "time", lambda: 1_000_000_020.0)  # a step of a minute has begun
    assert [lab.script.get("projects/").status_code for _ in range(3)] == [200] * 3
    response = lab.script.get("projects/")
    problem(response, 429)
    assert 0 < int(response["Retry-After"]) <= 60
    other = lab.script_of(make_project().created_by)
    assert other.get("projects/").status_code == 200
    monkeypatch.setattr(throttling.time, "time", lambda: 1_000_000_081.0)
    assert lab.script.get("projects/").status_code == 200


@override_settings(API_ANONYMOUS_A_MINUTE=2)
def test_secrets_cannot_be_tried_without_end(lab: Lab) -> None:
    statuses = [Script("rw_guess").get("projects/").status_code for _ in range(4)]
    assert statuses[:2] == [401, 401] and statuses[3] == 429
    assert lab.script.get("projects/").status_code == 200


def test_a_method_that_is_not_there_names_those_that_are(lab: Lab) -> None:
    response = lab.script.ask("DELETE", "projects/hydrolysis/")
    problem(response, 405)
    assert {m.strip() for m in response["Allow"].split(",")} == {"GET", "HEAD", "OPTIONS"}


def test_a_form_that_is_not_there_is_refused(lab: Lab) -> None:
    problem(lab.script.get("projects/", Accept="text/csv"), 406)
    problem(lab.script.get("projects/", Accept="nonsense"), 406)


def test_a_fault_is_told_as_a_fault_and_nothing_more(
    lab: Lab, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def broken(**kwargs: object) -> None:
        raise ZeroDivisionError("the secret of the house")

    monkeypatch.setattr(projects, "projects_with_roles", broken)
    lab.script.client.raise_request_exception = False
    response = lab.script.get("projects/")
    problem(response, 500)
    assert "secret" not in response.content.decode()
    assert "the secret of the house" in caplog.text and "GET /api/v1/projects/" in caplog.text


def test_a_fault_reaches_whoever_listens_for_faults(lab: Lab, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(**kwargs: object) -> None:
        raise ZeroDivisionError

    monkeypatch.setattr(projects, "projects_with_roles", broken)
    with pytest.raises(ZeroDivisionError):
        lab.script.get("projects/")


@pytest.mark.parametrize(
    ("error", "status"), [(OperationalError("gone"), 503), (UnreadablePostError("client left"), 400)]
)
def test_what_stands_around_the_server_is_no_fault_of_it(error: Exception, status: int) -> None:
    response = problem_details(error, {})
    assert response.status_code == status and str(error) not in str(response.data)
    assert ("Retry-After" in response) == (status == 503)
