"""What every page has to stand: the rules of accessibility in light and dark, two widths, a limit on its bytes."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from axe_playwright_python.base import AXE_SCRIPT as RULES
from playwright.sync_api import Page, Request

WIDE: Any = {"width": 1280, "height": 900}
NARROW: Any = {"width": 800, "height": 1100}
GRAVE = ("serious", "critical")
ALL_RULES: dict[str, Any] = {"resultTypes": ["violations"], "preload": False}
CONTRAST_ONLY = {**ALL_RULES, "runOnly": ["color-contrast"]}
TOO_WIDE = "document.documentElement.scrollWidth - document.documentElement.clientWidth"


def faults_of(page: Page) -> list[str]:
    """What is wrong with the page as it stands now; it is left light and wide."""
    found = []
    for size in (NARROW, WIDE):
        page.set_viewport_size(size)
        surplus = page.evaluate(TOO_WIDE)
        if surplus > 0:
            found.append(f"{surplus} px wider than a window of {size['width']} px")
    page.evaluate(RULES)
    found += breaches(page, "light", ALL_RULES)
    page.emulate_media(color_scheme="dark")
    found += breaches(page, "dark", CONTRAST_ONLY)  # nothing else changes with the colours
    page.emulate_media(color_scheme="light")
    return [f"{page.url} ({page.title()}): {fault}" for fault in found]


def breaches(page: Page, scheme: str, options: dict[str, Any]) -> list[str]:
    """Serious and critical breaches of the rules, each with the first elements that break it."""
    results = page.evaluate("options => axe.run(options).then(results => results.violations)", options)
    return [
        f"{scheme}: {breach['id']}: {breach['help']}: "
        + "; ".join(n["html"][:200] for n in breach["nodes"][:3])
        for breach in results
        if breach["impact"] in GRAVE
    ]


class Bytes:
    """Counts what a page fetches, as if for the first time."""

    def __init__(self, page: Page):
        page.context.new_cdp_session(page).send("Network.setCacheDisabled", {"cacheDisabled": True})
        page.on("requestfinished", self._count)
        self.total = 0

    def _count(self, request: Request) -> None:
        self.total += request.sizes()["responseBodySize"]

    @contextmanager
    def fewer_than(self, limit: int, faults: list[str], name: str) -> Iterator[None]:
        """Note a fault when more is fetched inside this block."""
        self.total = 0
        yield
        if self.total >= limit:
            faults.append(f"{name}: {self.total} bytes on a first visit")
