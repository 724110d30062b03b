"""Every page of a filled and of an empty project, as Chromium sees it: quiet, accessible, small, and no dead link."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from urllib.parse import urldefrag, urlsplit

import pytest
from django.test import Client
from django.urls import URLPattern, reverse
from playwright.sync_api import Page

from kinetics_db.projects.services import create_project
from kinetics_db.web.urls import urlpatterns
from tests.access.world import World, make_world
from tests.browser.inspection import Bytes, faults_of
from tests.factories.tokens import make_token

MOST_BYTES = 500_000
OTHERS = (
    "/search/?q=K",
    "/search/?q=[alcohol]0%2050..150%20mM",
    "/search/?q=[alcohol",
    "/projects/{slug}/runs/?q=no%20table",
    "/projects/{slug}/runs/new/?copy={run_id}",
    "/projects/{slug}/mechanisms/new/?from={version_id}",
    "/projects/{slug}/fits/new/?dataset={dataset_id}&version={version_id}",
    "/projects/{slug}/fits/new/?like={fit_id}",
    "/projects/{slug}/materials/compounds/new/?revise=alcohol",
    "/signals/{signal_table_id}/reduce/?kind=as%20reported",
    "/tables/{newer_table_id}/",
    "/fits/{open_fit_id}/",
)
"""Pages in another state than the one that their plain address shows."""


@pytest.fixture
def world(transactional_db: None) -> World:
    found = make_world()
    owner = found.people["owner"]
    create_project(user=owner, slug="empty", name="Not begun")
    found.keys["token_id"] = make_token(owner, scope="read")[0].pk
    return found


def plain_addresses(world: World) -> Iterator[str]:
    """The address of everything that has one, in the filled project, and in the empty one."""
    for pattern in urlpatterns:
        for slug in (world.keys["slug"], "empty"):
            keys = {**world.keys, "slug": slug}
            needed = _needed(pattern)
            if slug == "empty" and needed != ["slug"]:
                continue
            yield reverse(f"web:{pattern.name}", kwargs={name: keys[name] for name in needed})


def _needed(pattern: URLPattern) -> list[str]:
    return list(pattern.pattern.converters)


def pages_of(world: World, client: Client) -> list[str]:
    """Addresses of what is a page: no download, no part of a page, nothing that is only for sending."""
    others = [address.format(**world.keys) for address in OTHERS]
    found = []
    for address in [*plain_addresses(world), *others]:
        response = client.get(address)
        if response.status_code == 200 and not response.streaming:
            if response.content.startswith(b"<!doctype html>"):
                found.append(address)
        else:
            assert response.status_code in (200, 302, 405), f"{address}: {response.status_code}"
        response.close()
    return found


def test_every_page_is_quiet_accessible_and_small_and_its_links_lead_somewhere(
    open_page: Callable[..., Page], world: World
) -> None:
    client = world.client("owner")
    addresses = pages_of(world, client)
    assert len(addresses) > 40
    page = open_page("about:blank", user=world.people["owner"])
    fetched, faults, links = Bytes(page), list[str](), dict[str, str]()
    for address in addresses:
        with fetched.fewer_than(MOST_BYTES, faults, address):
            page.goto(address)
        faults += faults_of(page)
        for link in page.eval_on_selector_all("a[href]", "links => links.map((link) => link.href)"):
            links.setdefault(link, address)
    faults += dead(links, client, page.url)
    assert not faults, "\n".join(faults)


def test_the_page_that_everybody_may_see_is_accessible_too(
    open_page: Callable[..., Page], world: World
) -> None:
    page = open_page("/login/")
    assert not faults_of(page)


def dead(links: dict[str, str], client: Client, here: str) -> list[str]:
    """Links (and the pages they stand on) that lead to nothing, or to a place that is not on their page."""
    found, answers = [], dict[str, tuple[int, str]]()
    for link, origin in links.items():
        if urlsplit(link).netloc != urlsplit(here).netloc:
            found.append(f"{origin}: {link} leads away")
            continue
        target, place = urldefrag(link)
        if target not in answers:
            answers[target] = answer(client, target)
        status, html = answers[target]
        if status not in (200, 302):
            found.append(f"{origin}: {link} answers {status}")
        elif place and not re.search(rf'\bid="{re.escape(place)}"', html):
            found.append(f"{origin}: {link}: there is no such place")
    return found


def answer(client: Client, target: str) -> tuple[int, str]:
    parts = urlsplit(target)
    response = client.get(f"{parts.path}?{parts.query}")
    is_page = response.headers.get("Content-Type", "").startswith("text/html")
    html = response.content.decode() if is_page else ""
    response.close()
    return response.status_code, html
