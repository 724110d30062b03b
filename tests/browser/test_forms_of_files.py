"""Forms that answer while they are filled in: nothing that was typed is lost, in a real browser."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from playwright.sync_api import Page, Route, expect

from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.services import store_file
from kinetics_db.projects.services import create_project
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_user

NMR = b"t / min;I(A) / a.u.;I(std) / a.u.\n" + b"".join(b"%d;%d,5;12,0\n" % (i, 60 - i) for i in range(12))


@pytest.fixture
def run(transactional_db: None) -> Run:
    user = make_user("mira")
    project = create_project(user=user, slug="oxidation", name="Oxidation")
    return make_run(user, project.pk, "K07", {"A": Amount(30.0, "mM")})


def test_a_file_is_chosen_corrected_while_looking_and_stored(
    open_page: Callable[..., Page], run: Run
) -> None:
    page = open_page(f"/runs/{run.pk}/files/new/", user=run.created_by)
    page.set_input_files("[name=file]", {"name": "K07.csv", "mimeType": "text/csv", "buffer": NMR})
    page.get_by_role("button", name="Show what is understood").click()
    expect(page.get_by_text("decimal sign: comma")).to_be_visible()
    page.fill("#column-1-name", "bromide")
    page.press("#column-1-name", "Tab")
    expect(page.get_by_text("2 signals: bromide (a.u.), I(std) (a.u.)")).to_be_visible()
    assert page.evaluate("document.activeElement.id") == "column-1-unit"
    page.get_by_role("button", name="Store the file").click()
    expect(page.get_by_role("heading", name="Signals of run K07")).to_be_visible()


def test_what_is_typed_while_an_answer_is_on_its_way_stays(open_page: Callable[..., Page], run: Run) -> None:
    signals = store_file(user=run.created_by, run=run, name="K07.csv", data=NMR)
    page = open_page(f"/signals/{signals.pk}/reduce/?kind=internal%20standard", user=run.created_by)
    waiting: list[Route] = []
    page.route("**/reduce/", lambda route: waiting.append(route))
    page.select_option("[name=standard_signal]", "I(std)")
    page.wait_for_timeout(600)
    assert len(waiting) == 1
    page.locator("[name=standard_species]").press_sequentially("dioxane")
    page.unroute("**/reduce/")
    filled = {
        "noise_absolute": "0.1",
        "standard_nuclei": "8",
        "standard_concentration": "0.02",
        "row-0-nuclei": "2",
        "row-0-species": "A",
    }
    for name, value in filled.items():
        page.locator(f"[name='{name}']").press_sequentially(value)
        page.keyboard.press("Tab")
    expect(page.get_by_role("heading", name="What this gives")).to_be_visible()
    assert page.locator("[name=standard_species]").input_value() == "dioxane"
    assert page.locator("[name=standard_signal]").input_value() == "I(std)"
    page.get_by_role("button", name="Store the concentrations").click()
    expect(page.get_by_role("heading", name="Run K07, table 1")).to_be_visible()
    assert ConcentrationTable.objects.get().reduction.content["standard"]["species"] == "dioxane"
