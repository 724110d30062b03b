"""Mechanisms checked while they are written, and fits followed while they are computed, in a real browser."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from playwright.sync_api import Page, expect

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.evidence.services import compute_and_assess
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import claim_job, heartbeat
from tests.factories.small import SmallStudy, make_study

WRONG = "A + B --k_1--> C\nC --k_1--> D\nobesrve x = [A]"


@pytest.fixture
def small(transactional_db: None) -> SmallStudy:
    return make_study(starts=(10.0, 20.0, 15.0, 12.0, 8.0))


def caret(page: Page) -> tuple[str, str]:
    """Which element has the focus, and the text before its caret."""
    found = page.evaluate(
        "[document.activeElement.id, document.activeElement.value.slice(0, document.activeElement.selectionStart)]"
    )
    return found[0], found[1]


def test_a_text_is_checked_while_it_is_written_and_a_problem_leads_to_its_place(
    open_page: Callable[..., Page], small: SmallStudy
) -> None:
    page = open_page(f"/projects/{small.project.slug}/mechanisms/new/", user=small.user)
    page.fill("#id_text", WRONG)
    expect(page.get_by_text("'obesrve' is not a statement")).to_be_visible()
    page.get_by_role("link", name="line 3, column 1").click()
    name, before = caret(page)
    assert name == "id_text" and before == WRONG[: WRONG.index("obesrve")]
    page.fill("#id_text", "A --k--> B")
    expect(page.get_by_text("This can be stored.")).to_be_visible()
    page.fill("#id_name", "by hand")
    page.get_by_role("button", name="Store this version").click()
    expect(page.get_by_role("heading", name="by hand, version 1")).to_be_visible()


def test_a_place_is_found_behind_characters_that_scripts_count_twice(
    open_page: Callable[..., Page], small: SmallStudy
) -> None:
    page = open_page(f"/projects/{small.project.slug}/mechanisms/new/", user=small.user)
    text = 'A --k--> B\n"\N{GRINNING FACE}" --k--> B + ?'
    page.fill("#id_text", text)
    page.locator("#checked a[data-line='2']").first.click()
    column = int(page.locator("#checked a[data-line='2']").first.get_attribute("data-column") or "0")
    _, before = caret(page)
    assert before == "A --k--> B\n" + text.split("\n")[1][: column - 1]


def test_a_fit_is_followed_until_its_curves_are_drawn(
    open_page: Callable[..., Page], small: SmallStudy
) -> None:
    fit = request_fit(
        user=small.user,
        dataset=small.dataset,
        mechanism_version=small.version,
        constants=[Constant("k", 0.02)],
    )
    page = open_page(f"/fits/{fit.pk}/", user=small.user)
    expect(page.locator("#progress")).to_contain_text("waiting")
    claim = claim_job(job_for(kind="fit", subject_id=fit.pk).pk)
    assert claim is not None
    heartbeat(claim, progress=0.5, message="iteration 3, cost 12.5")
    expect(page.locator("#progress")).to_contain_text("running: iteration 3, cost 12.5")
    compute_and_assess(claim)
    expect(page.get_by_text("converged").first).to_be_visible()
    expect(page.locator("article canvas").first).to_be_visible()
    last = page.locator("article").last
    last.scroll_into_view_if_needed()
    expect(last.locator("canvas")).to_have_count(2)  # these came when they were scrolled to
