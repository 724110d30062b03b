"""The OpenAPI description is valid, complete, and its pages need nothing from elsewhere."""

from __future__ import annotations

import io
import json
import re
from typing import Any

import pytest
from django.contrib.staticfiles import finders
from django.core.management import call_command
from django.test import Client
from django.urls import get_resolver
from openapi_spec_validator import validate

from api.urls import urlpatterns

pytestmark = pytest.mark.django_db

OUTSIDE = {"/api/v1/docs/"}
METHODS = ("get", "post", "put", "patch", "delete")


@pytest.fixture(scope="module")
def schema() -> dict[str, Any]:
    out = io.StringIO()
    call_command("spectacular", "--format", "openapi-json", "--validate", "--fail-on-warn", stdout=out)
    return dict(json.loads(out.getvalue()))


def operations(schema: dict[str, Any]) -> list[tuple[str, dict[str, Any]]]:
    return [
        (f"{method.upper()} {path}", item[method])
        for path, item in schema["paths"].items()
        for method in METHODS
        if method in item
    ]


def test_the_description_is_valid_openapi_3_1(schema: dict[str, Any]) -> None:
    assert schema["openapi"].startswith("3.1.")
    validate(schema)


def test_every_address_is_described(schema: dict[str, Any]) -> None:
    described = {re.sub(r"{\w+}", "{}", path) for path in schema["paths"]}
    there = {
        "/api/v1/" + re.sub(r"<[^>]+>", "{}", str(pattern.pattern))
        for pattern in urlpatterns
        if pattern.name != "elsewhere" and not str(pattern.pattern).startswith("^")
    }
    assert there - OUTSIDE == described
    assert get_resolver().resolve("/api/v1/schema/").view_name == "api:schema"


def test_every_operation_says_what_it_does_and_how_it_is_refused(schema: dict[str, Any]) -> None:
    for name, operation in operations(schema):
        assert operation["summary"] and operation["tags"], name
        if operation["tags"] == ["about"]:
            continue
        assert {"401", "403", "404", "422", "429"} <= set(operation["responses"]), name
        assert operation["security"] == [{"token": []}, {"cookieAuth": []}], name
        for status, answer in operation["responses"].items():
            if status.startswith(("4", "5")):
                (media,) = answer["content"]
                assert media == "application/problem+json", name
                assert answer["description"], (name, status)


def test_a_script_and_a_browser_can_both_say_who_they_are(schema: dict[str, Any]) -> None:
    schemes = schema["components"]["securitySchemes"]
    assert schemes["token"]["scheme"] == "bearer" and schemes["cookieAuth"]["in"] == "cookie"


def test_names_of_operations_are_unique(schema: dict[str, Any]) -> None:
    names = [operation["operationId"] for _, operation in operations(schema)]
    assert len(names) == len(set(names))


def test_the_description_is_served_without_a_login(client: Client) -> None:
    yaml = client.get("/api/v1/schema/")
    assert yaml.status_code == 200 and b"openapi: 3.1" in yaml.content
    as_json = client.get("/api/v1/schema/", headers={"accept": "application/vnd.oai.openapi+json"})
    assert json.loads(as_json.content)["info"]["title"] == "Ratewright"
    assert client.get("/api/v1/schema/", headers={"if-none-match": yaml["ETag"]}).status_code == 304


def test_the_pages_to_read_it_need_nothing_from_elsewhere(client: Client) -> None:
    page = client.get("/api/v1/docs/", headers={"accept": "text/html"})
    text = page.content.decode()
    assert page.status_code == 200
    addresses = re.findall(r'(?:src|href)="([^"]+)"', text)
    assert len(addresses) >= 5 and all(a.startswith("/") for a in addresses)
    for address in addresses:
        if address.startswith("/static/"):
            assert finders.find(address.removeprefix("/static/")), address
    assert not re.search(r"<script>[^<]", text)
    script = client.get("/api/v1/docs/?script=", headers={"accept": "*/*"})
    assert script["Content-Type"].startswith("application/javascript")
    assert b"/api/v1/schema/" in script.content and b"http" not in script.content.replace(b'http"', b"")


def test_a_refused_page_is_problem_details(client: Client) -> None:
    response = client.get("/api/v1/docs/", headers={"accept": "text/html", "authorization": "Bearer rw_no"})
    assert response.status_code == 401 and response["Content-Type"] == "application/problem+json"
    assert response.json()["status"] == 401


def test_only_that_page_may_write_styles_and_none_may_write_scripts(client: Client) -> None:
    docs = client.get("/api/v1/docs/", headers={"accept": "text/html"})["Content-Security-Policy"]
    schema = client.get("/api/v1/schema/")["Content-Security-Policy"]
    assert "'unsafe-inline'" in docs and "'unsafe-inline'" not in schema
    scripts = next(part for part in docs.split(";") if part.strip().startswith("script-src"))
    assert scripts.split() == ["script-src", "'self'"]
