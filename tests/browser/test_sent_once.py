"""A form that is pressed twice in haste is sent once, and can be sent again later."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from playwright.sync_api import Page, Route, expect

from kinetics_db.runs.models import Run
from tests.factories.small import SmallStudy, make_study


@pytest.fixture
def small(transactional_db: None) -> SmallStudy:
    return make_study(starts=(10.0,))


def test_a_double_press_logs_one_run_and_going_back_one_may_log_another(
    open_page: Callable[..., Page], small: SmallStudy
) -> None:
    where = f"/projects/{small.project.slug}/runs/new/"
    page = open_page(f"{where}?copy={Run.objects.get().pk}", user=small.user)
    sent: list[Route] = []
    page.route(f"**{where}**", lambda route: sent.append(route) if is_post(route) else route.continue_())
    send = page.get_by_role("button", name="Log the run")
    for code in ("first", "second"):
        page.fill("[name=code]", code)
        send.scroll_into_view_if_needed()
        box = send.bounding_box()
        assert box is not None
        for _ in range(2):  # the answer waits until both are pressed
            page.mouse.click(box["x"] + 5, box["y"] + 5)
            page.wait_for_timeout(300)
        assert len(sent) == 1
        sent.pop().continue_()
        expect(page.get_by_role("heading", name=f"Run {code}", exact=True)).to_be_visible()
        if code == "first":
            page.go_back()
    assert sorted(Run.objects.values_list("code", flat=True)) == ["R-1", "first", "second"]


def is_post(route: Route) -> bool:
    return route.request.method == "POST"
