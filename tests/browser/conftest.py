"""A real browser for the pages; whatever it complains about fails the test."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from django.test import Client
from playwright.sync_api import Browser, BrowserContext, Page, expect, sync_playwright

from tests.browser.watching import TELL_VIOLATIONS, start_browser, watch

# Playwright's calls run inside an event loop, where Django otherwise refuses its database.
os.environ.setdefault("DJANGO_ALLOW_ASYNC_UNSAFE", "1")

expect.set_options(timeout=10_000)  # other tests run beside these
WINDOW: Any = {"width": 1280, "height": 900}


@pytest.fixture(scope="session")
def chromium() -> Iterator[Browser]:
    """The browser of the whole session: $CHROMIUM, or `chromium` of the path."""
    with sync_playwright() as playwright:
        browser = start_browser(playwright)
        yield browser
        browser.close()


@pytest.fixture
def server_address(live_server: Any) -> str:
    """Where the pages are; tests that need no database put a server of their own in its place."""
    return str(live_server.url)


@pytest.fixture
def open_page(chromium: Browser, server_address: str) -> Iterator[Callable[..., Page]]:
    """Open a page of the server in a window of its own: ``open_page("/runs/3/", color_scheme="dark")``.

    ``user`` is logged in first. Errors on the console, breaches of the content policy, exceptions of scripts and
    requests that fail make the test fail at its end.
    """
    contexts: list[BrowserContext] = []
    complaints: list[str] = []

    def opened(path: str, *, user: Any = None, **options: Any) -> Page:
        context = chromium.new_context(base_url=server_address, **{"viewport": WINDOW, **options})
        contexts.append(context)
        if user is not None:
            log_in(context, user, server_address)
        context.add_init_script(TELL_VIOLATIONS)
        page = context.new_page()
        watch(page, complaints)
        page.goto(path)
        return page

    yield opened
    for context in contexts:
        context.close()
    assert not complaints, complaints


def log_in(context: BrowserContext, user: Any, address: str) -> None:
    """Give the browser the session of somebody who has logged in."""
    client = Client()
    client.force_login(user)
    context.add_cookies([{"name": "sessionid", "value": client.cookies["sessionid"].value, "url": address}])
