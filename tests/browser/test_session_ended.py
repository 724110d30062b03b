"""Somebody logs out in one tab while a form stands in another."""

from __future__ import annotations

from contextlib import closing

import pytest
from playwright.sync_api import Browser, Page, expect

from kinetics_db.runs.models import Run
from tests.factories.small import SmallStudy, make_study


@pytest.fixture
def small(transactional_db: None) -> SmallStudy:
    return make_study(starts=(10.0,))


def log_in(page: Page, small: SmallStudy) -> None:
    page.fill("[name=username]", small.user.username)
    page.fill("[name=password]", "of-the-browser-test")
    page.get_by_role("button", name="Log in").click()
    expect(page.get_by_role("button", name="Log out")).to_be_visible()


def test_a_run_survives_a_logout_and_a_login_in_another_tab(
    chromium: Browser, server_address: str, small: SmallStudy
) -> None:
    """Not by `open_page`: the browser notes on its console that a part of the page was refused."""
    small.user.set_password("of-the-browser-test")
    small.user.save()
    with closing(chromium.new_context(base_url=server_address)) as context:
        page, other = context.new_page(), context.new_page()
        other.goto("/login/")
        log_in(other, small)
        page.goto(f"/projects/{small.project.slug}/runs/new/?copy={Run.objects.get().pk}")
        other.get_by_role("button", name="Log out").click()
        expect(other.get_by_role("heading", name="Log in")).to_be_visible()
        page.fill("[name=code]", "kept")
        expect(page.get_by_text("What you typed is still here.")).to_be_visible()
        log_in(other, small)
        page.fill("[name=notes]", "went on")
        expect(page.locator("#amounts table")).to_be_visible()
        page.get_by_role("button", name="Log the run").click()
        expect(page.get_by_role("heading", name="Run kept", exact=True)).to_be_visible()
