"""Response headers, and pages for what went wrong."""

from __future__ import annotations

import re
from collections.abc import Callable

import pytest
from csp.middleware import CSPMiddleware
from django.http import HttpRequest, HttpResponse
from django.test import Client, RequestFactory
from django.views.defaults import bad_request, page_not_found, permission_denied, server_error

from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted, RatewrightError, Unavailable
from kinetics_db.web.middleware import PageHeaders
from kinetics_db.web.pages import page
from tests.web.study import Study

REQUEST = RequestFactory().get("/somewhere/")


POLICY = {
    "default-src": "'none'",
    "script-src": "'self'",
    "style-src": "'self'",
    "img-src": "'self' data: blob:",
    "connect-src": "'self'",
    "form-action": "'self'",
    "base-uri": "'none'",
    "frame-ancestors": "'none'",
}


def policy_of(response: HttpResponse) -> dict[str, str]:
    found = {}
    for part in response["Content-Security-Policy"].split(";"):
        name, _, allowed = part.strip().partition(" ")
        found[name] = allowed
    return found


@pytest.mark.parametrize("address", ["/login/", "/", "/projects/oxidation/", "/projects/oxidation/evidence/"])
def test_pages_let_nothing_in_but_our_own_files(browser: Client, address: str) -> None:
    response = browser.get(address, follow=True)
    assert response.status_code == 200
    assert policy_of(response) == POLICY
    assert "unsafe" not in response["Content-Security-Policy"]


def test_pages_carry_the_other_headers_of_protection(client: Client, study: Study) -> None:
    response = client.get("/login/")
    assert response["Referrer-Policy"] == "same-origin"
    assert response["X-Content-Type-Options"] == "nosniff"
    assert response["X-Frame-Options"] == "DENY"
    assert "camera=()" in response["Permissions-Policy"]


def test_a_response_with_its_own_headers_keeps_them() -> None:
    def view(request: HttpRequest) -> HttpResponse:
        return HttpResponse(headers={"Referrer-Policy": "no-referrer"})

    assert PageHeaders(view)(REQUEST)["Referrer-Policy"] == "no-referrer"
    assert PageHeaders(lambda request: HttpResponse())(REQUEST)["Referrer-Policy"] == "same-origin"


def test_a_response_with_its_own_policy_keeps_it() -> None:
    def view(request: HttpRequest) -> HttpResponse:
        return HttpResponse(headers={"Content-Security-Policy": "default-src 'self'"})

    assert CSPMiddleware(view)(REQUEST)["Content-Security-Policy"] == "default-src 'self'"
    assert policy_of(CSPMiddleware(lambda request: HttpResponse())(RequestFactory().get("/"))) == POLICY


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (NotFound("there is no run 'K9'"), 404),
        (NotPermitted("your role is 'reader'"), 403),
        (InvalidInput("no number", field="curve"), 400),
        (Conflict("somebody was first"), 409),
        (Unavailable("the file store is away"), 503),
    ],
)
def test_errors_of_services_become_pages_that_say_what_is_wrong(
    rf: RequestFactory, error: RatewrightError, status: int
) -> None:
    @page
    def view(request: HttpRequest) -> HttpResponse:
        raise error

    request = rf.get("/")
    request.user = type("Person", (), {"is_authenticated": True, "time_zone": "UTC"})()
    response = view(request)
    assert response.status_code == status
    html = response.content.decode()
    assert str(error)[1:].replace("'", "&#x27;") in html
    assert "ratewright.css" in html


def test_pages_answer_no_other_method_than_reading(browser: Client) -> None:
    assert browser.post("/").status_code == 405
    assert browser.head("/").status_code == 200


@pytest.mark.parametrize(
    ("view", "status", "words"),
    [
        (lambda r: page_not_found(r, Exception()), 404, "There is no such page"),
        (lambda r: permission_denied(r, Exception()), 403, "You may not do this"),
        (lambda r: bad_request(r, Exception()), 400, "cannot be used as it is"),
        (server_error, 500, "Something went wrong here"),
    ],
)
def test_error_pages_come_up_without_a_database(
    view: Callable[[HttpRequest], HttpResponse], status: int, words: str
) -> None:
    # This test is not allowed to touch the database: pytest-django refuses every query.
    response = view(REQUEST)
    html = response.content.decode()
    assert response.status_code == status
    assert words in html
    assert "ratewright.css" in html
    assert not re.search(r"<script|\sstyle=", html)


def test_an_unknown_address_is_a_page_in_the_same_look(client: Client) -> None:
    response = client.get("/no/such/place/")
    assert response.status_code == 404
    assert "There is no such page" in response.content.decode()
    assert policy_of(response) == POLICY


def test_a_host_name_that_is_not_ours_is_refused_in_the_same_look(client: Client) -> None:
    response = client.get("/login/", headers={"host": "elsewhere.example"})
    assert response.status_code == 400
    assert "cannot be used as it is" in response.content.decode()


def test_a_style_sheet_and_an_icon_are_served_by_ourselves(client: Client, study: Study) -> None:
    from django.contrib.staticfiles import finders

    html = client.get("/login/").content.decode()
    linked = re.findall(r'<link [^>]*href="/static/([^"]+)"', html)
    assert sorted(linked) == ["web/mark.svg", "web/ratewright.css"]
    assert all(finders.find(name) for name in linked)


@pytest.mark.parametrize(
    "address",
    [
        "/",
        "/search/?q=x",
        "/account/",
        "/account/tokens/",
        "/projects/oxidation/",
        "/projects/oxidation/evidence/",
    ],
)
def test_every_file_that_a_page_names_is_one_of_ours(browser: Client, address: str) -> None:
    from django.contrib.staticfiles import finders

    html = browser.get(address).content.decode()
    named = re.findall(r'<(?:link|script)[^>]*(?:href|src)="([^"]+)"', html)
    assert "/static/web/vendor/htmx-2.0.11.min.js" in named
    for name in named:
        assert name.startswith("/static/")
        assert finders.find(name.removeprefix("/static/")), name
