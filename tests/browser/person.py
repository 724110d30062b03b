"""A person at the browser, from the login to the last click."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from playwright.sync_api import Browser, Locator, Page

from tests.browser.inspection import WIDE, faults_of
from tests.browser.watching import TELL_VIOLATIONS, watch

FOCUSED = """() => {
  const element = document.activeElement;
  return element.labels?.[0]?.innerText ?? element.innerText;
}"""
MOST_STEPS = 60
REFUSED = "status of 422"


class Person:
    """Looks at pages and uses them; `faults` has everything that was wrong with one of them."""

    def __init__(self, chromium: Browser, address: str):
        self.context = chromium.new_context(base_url=address, viewport=WIDE)
        self.context.add_init_script(TELL_VIOLATIONS)
        self.page: Page = self.context.new_page()
        self.faults: list[str] = []
        watch(self.page, self.faults)

    def look(self) -> None:
        """Check the page as it stands now."""
        self.page.wait_for_load_state()
        self.faults += faults_of(self.page)

    @contextmanager
    def being_refused(self) -> Iterator[None]:
        """What is sent inside this block is refused, which the browser writes down; nothing else may be wrong."""
        before = len(self.faults)
        with self.page.expect_console_message(lambda message: REFUSED in message.text):
            yield
        self.faults[before:] = [fault for fault in self.faults[before:] if REFUSED not in fault]

    def go(self, *links: str) -> None:
        """Click one link after the other."""
        for name in links:
            self.page.get_by_role("link", name=name, exact=True).first.click()

    def press(self, button: str) -> None:
        self.page.get_by_role("button", name=button, exact=True).click()

    def fill(self, **fields: str) -> None:
        """Type into fields by their names; '__' stands for a hyphen."""
        for name, text in fields.items():
            self.field(name.replace("__", "-")).fill(text)

    def field(self, name: str) -> Locator:
        return self.page.locator(f"[name='{name}']:not([type=hidden])")

    def tab_to(self, label: str) -> None:
        """Press the tabulator until the element with this label or text has the focus."""
        for _ in range(MOST_STEPS):
            self.page.keyboard.press("Tab")
            if str(self.page.evaluate(FOCUSED)).strip() == label:
                return
        raise AssertionError(f"the tabulator does not reach '{label}'")

    def type_into(self, **fields: str) -> None:
        """Fill in fields by their labels without the mouse ('_' stands for a blank)."""
        for label, text in fields.items():
            self.tab_to(label.replace("_", " "))
            self.page.keyboard.type(text)
