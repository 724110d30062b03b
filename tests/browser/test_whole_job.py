"""The whole job by hand, from the login to the verdict: real server, real worker, real browser."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest
from playwright.sync_api import Browser, expect

from tests.browser.person import Person
from tests.factories.people import make_user

pytestmark = [pytest.mark.processes, pytest.mark.django_db(transaction=True)]

NAME, PASSWORD = "mira", "a long password 1"
TRUE_K = 2e-3
"""The constant behind the simulated files, in 1/s."""
NOISE = 0.4
TIMES = np.arange(100.0, 1501.0, 70.0)
STANDARD = 0.05
MISTAKEN = "alcohol --k_ox--> ketone\nobserve turned = [ketne]"
RIGHT = "alcohol --k_ox--> ketone"
UNTIL_COMPUTED = 60_000


def export(start: float, seed: int) -> bytes:
    """What the instrument writes of a run: three decimals behind commas, which may as well be thousands.

    ``start`` is the concentration of the alcohol at zero in mol/L.
    """
    random = np.random.default_rng(seed)
    alcohol = start * np.exp(-TRUE_K * TIMES)
    columns = [alcohol, start - alcohol, np.full(TIMES.size, STANDARD)]
    signals = np.array([100 / STANDARD * column for column in columns]) + random.normal(
        0, NOISE, (3, TIMES.size)
    )
    lines = [
        f"{t:.0f};" + ";".join(f"{s:.3f}".replace(".", ",") for s in row)
        for t, row in zip(TIMES, signals.T, strict=True)
    ]
    return "\r\n".join(["t / s;H-1;H-2;ref", *lines]).encode()


@pytest.fixture
def person(chromium: Browser, web_server_process: Callable[..., tuple[Any, str]]) -> Iterator[Person]:
    make_user(NAME)
    _, address = web_server_process()
    person = Person(chromium, address)
    yield person
    person.context.close()
    assert not person.faults, "\n".join(person.faults)


def test_a_person_gets_from_the_login_to_the_verdict(
    person: Person, celery_worker_process: Callable[..., Any]
) -> None:
    log_in(person)
    make_a_project(person)
    enter_compounds(person)
    log_a_run(person)
    copy_it(person)
    give_the_first_run_its_file(person)
    reduce_it(person)
    give_the_second_run_its_file(person)
    write_a_mechanism(person)
    freeze_a_dataset(person)
    ask_for_a_fit(person)
    celery_worker_process()
    read_the_result(person)
    go_from_the_evidence_to_the_curves(person)
    stop_a_longer_fit(person)


def log_in(person: Person) -> None:
    page = person.page
    page.goto("/")
    expect(page).to_have_url(re.compile("/login/"))
    person.fill(username=NAME, password="another one 1")
    person.press("Log in")
    expect(page.get_by_role("alert")).to_contain_text("do not belong together")
    assert person.field("username").input_value() == NAME
    person.look()
    person.fill(password=PASSWORD)
    person.press("Log in")
    expect(page.get_by_role("heading", name="Projects")).to_be_visible()
    person.look()


def make_a_project(person: Person) -> None:
    """With the keyboard alone."""
    page = person.page
    person.tab_to("New project")
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", name="New project")).to_be_visible()
    person.look()
    person.type_into(Name="Oxidation of an alcohol")
    person.tab_to("Make the project")
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", name="Oxidation of an alcohol")).to_be_visible()
    person.look()


def enter_compounds(person: Person) -> None:
    page = person.page
    for name in ("alcohol", "standard"):
        person.go("materials", "Enter a compound")
        person.fill(name=name, molar_mass="100,0")
        if name == "alcohol":
            with person.being_refused():
                person.press("Store the compound")
            expect(page.get_by_text("write 100.0")).to_be_visible()
            assert person.field("molar_mass").input_value() == "100,0"
            person.look()
        person.fill(molar_mass="100.0")
        person.press("Store the compound")
    expect(page.get_by_role("rowheader", name="standard")).to_be_visible()
    person.look()


def log_a_run(person: Person) -> None:
    page = person.page
    person.go("runs", "Log a run")
    person.fill(
        code="K01", temperature_value="25", volume_value="10", volume_unit="mL", volume_uncertainty="0.02"
    )
    person.fill(
        charges__1__source="alcohol",
        charges__1__amount="100",
        charges__1__unit="mg",
        charges__1__uncertainty="0.2",
    )
    expect(page.locator("#amounts")).to_contain_text("mmol/L")
    person.press("One more charge")
    person.fill(
        charges__2__source="standard",
        charges__2__amount="50",
        charges__2__unit="mg",
        charges__2__uncertainty="0.1",
    )
    row = page.locator("#amounts tr", has_text="standard")
    expect(row).to_contain_text("50.00(14) mmol/L")
    expect(page.locator("#amounts tr", has_text="alcohol")).to_contain_text("100.00(28) mmol/L")
    person.look()
    person.press("Log the run")
    expect(page.get_by_role("heading", name="Run K01")).to_be_visible()
    expect(page.get_by_text("waits for its instrument file")).to_be_visible()
    person.look()


def copy_it(person: Person) -> None:
    page = person.page
    person.go("Copy")
    expect(page.get_by_text("copied from")).to_be_visible()
    person.fill(code="K02", charges__1__amount="200")
    expect(page.locator("#amounts tr", has_text="alcohol")).to_contain_text("200.00")
    expect(page.locator("#amounts .changed").first).to_contain_text("Changed against")
    person.look()
    person.press("Log the run")
    expect(page.get_by_role("heading", name="Run K02")).to_be_visible()


def choose_file(person: Person, run: str, data: bytes) -> None:
    person.go("runs", run, "Add a file")
    person.page.set_input_files("[name=file]", {"name": f"{run}.csv", "mimeType": "text/csv", "buffer": data})


def give_the_first_run_its_file(person: Person) -> None:
    page = person.page
    choose_file(person, "K01", export(0.1, seed=1))
    person.look()
    with person.being_refused():
        person.press("Show what is understood")
    expect(page.get_by_role("heading", name="This file cannot be read as it is")).to_be_visible()
    expect(page.get_by_role("alert")).to_contain_text("can be a decimal comma or a thousands separator")
    person.look()
    person.field("decimal").select_option("comma")
    expect(
        page.get_by_text("3 signals: H-1 (no unit stated), H-2 (no unit stated), ref (no unit stated)")
    ).to_be_visible()
    expect(page.locator("figure canvas").first).to_be_visible()
    person.look()
    person.press("Store the file")
    expect(page.get_by_role("heading", name="Signals of run K01")).to_be_visible()
    person.look()


def reduce_it(person: Person) -> None:
    page = person.page
    person.go("Reduce to concentrations")
    expect(page.get_by_role("heading", name="Signals of K01 to concentrations")).to_be_visible()
    person.look()
    person.fill(name="against the standard")
    person.field("standard_signal").select_option("ref")
    person.fill(
        standard_species="standard", standard_nuclei="1", standard_concentration="50", standard_unit="mmol/L",
        standard_relative_u="0.2 %", standard_owner="standard", noise_absolute=str(NOISE),
    )  # fmt: skip
    for row, species in ((0, "alcohol"), (1, "ketone")):
        person.fill(**{f"row__{row}__species": species, f"row__{row}__nuclei": "1"})
    page.keyboard.press("Tab")
    expect(page.get_by_role("heading", name="What this gives")).to_be_visible()
    expect(page.locator("#reducing canvas").first).to_be_visible()
    person.look()
    person.press("Store the concentrations")
    expect(page.get_by_role("heading", name="Run K01, table 1")).to_be_visible()
    person.look()


def give_the_second_run_its_file(person: Person) -> None:
    """The reading and the recipe of the first run are offered and fit."""
    page = person.page
    choose_file(person, "K02", export(0.2, seed=2))
    person.press("Show what is understood")
    expect(page.get_by_text("Read like the file K01.csv of run K01.")).to_be_visible()
    person.press("Store the file")
    person.go("Reduce to concentrations")
    expect(page.get_by_text("Filled as for K01")).to_be_visible()
    person.press("Store the concentrations")
    expect(page.get_by_role("heading", name="Run K02, table 1")).to_be_visible()


def write_a_mechanism(person: Person) -> None:
    page = person.page
    person.go("mechanisms", "Write a mechanism")
    person.fill(name="first order", text=MISTAKEN)
    checked = page.locator("#checked")
    expect(checked).to_contain_text("This cannot be used yet")
    expect(checked.get_by_role("link", name="line 2, column 18")).to_be_visible()
    person.look()
    person.fill(text=RIGHT)
    expect(checked).to_contain_text("This can be stored.")
    expect(checked).to_contain_text("alcohol, ketone")
    expect(checked.locator(".units")).to_contain_text("1/s")
    person.look()
    person.press("Store this version")
    expect(page.get_by_role("heading", name="first order, version 1")).to_be_visible()
    person.look()


def freeze_a_dataset(person: Person) -> None:
    page = person.page
    person.go("datasets")
    person.go("Freeze a dataset")
    person.fill(name="both runs")
    for run in ("K01", "K02"):
        page.get_by_label(f"take table 1 of run {run}").check()
    person.look()
    person.press("Freeze the dataset")
    expect(page.get_by_role("heading", name="both runs, version 1")).to_be_visible()
    person.look()


def ask_for_a_fit(person: Person) -> None:
    page = person.page
    person.go("Fit a mechanism to it")
    page.get_by_label("Mechanism version").select_option("first order v1")
    person.press("Go on")
    compounds = page.get_by_role("group", name="Compounds charged, as species")
    expect(compounds.get_by_label("alcohol")).to_have_value("as:alcohol")
    expect(compounds.get_by_text("not decided")).to_have_count(1)
    compounds.get_by_label("standard").select_option("plays no part")
    person.look()
    with person.being_refused():
        person.press("Ask for the fit")
    expect(page.get_by_text("A number is missing").first).to_be_visible()
    person.look()
    constant = page.get_by_role("group", name="k")
    constant.get_by_label("Start value").first.fill("1e-3")
    person.press("Ask for the fit")
    expect(page.locator("#progress")).to_contain_text("waiting: for a worker to take it up")
    person.look()


def read_the_result(person: Person) -> None:
    """It appears by itself when the worker is there."""
    page = person.page
    expect(page.locator(".ending")).to_contain_text("converged", timeout=UNTIL_COMPUTED)
    expect(page.locator(".lead")).to_contain_text("Verdicts on the 2 runs: agrees 2.")
    address = page.get_by_role("link", name="Every digit as CSV").get_attribute("href")
    lines = io.StringIO(person.context.request.get(str(address)).text().lstrip("\ufeff"))
    [row] = [row for row in csv.DictReader(lines) if row["name"] == "k_ox"]
    value, error = float(row["value"]), float(row["standard_error"])
    assert row["unit"] == "1/s"
    assert 0 < error < 0.02 * TRUE_K
    assert abs(value - TRUE_K) < 3 * error
    expect(page.locator("table.constants")).to_contain_text(f"{value * 1e3:.2f}")
    expect(page.locator("article canvas").first).to_be_visible()
    person.look()


def go_from_the_evidence_to_the_curves(person: Person) -> None:
    page = person.page
    person.go("evidence of the project")
    row = page.get_by_role("row", name="K02")
    expect(row).to_contain_text("agrees")
    person.look()
    row.get_by_role("link", name="agrees").click()
    article = page.locator("article:target")
    expect(article.get_by_role("heading", name="K02")).to_be_in_viewport()
    expect(article.locator("canvas").first).to_be_visible()
    drawn = article.locator("figure").first
    expect(drawn).to_contain_text("points and the curves of first order v1")


def stop_a_longer_fit(person: Person) -> None:
    page = person.page
    person.go("Fit again with this changed")
    page.get_by_label("Starts", exact=True).fill("1000")
    person.press("Ask for the fit")
    expect(page.locator("#progress")).to_contain_text("running: iteration", timeout=UNTIL_COMPUTED)
    person.press("Stop it")
    expect(page.locator(".ending")).to_contain_text("stopped on request", timeout=UNTIL_COMPUTED)
    person.look()
    page.get_by_role("button", name="Log out").click()
    expect(page.get_by_role("heading", name="Log in")).to_be_visible()
