"""Charts in a real browser: drawn quickly, switched, zoomed, read by the keyboard, saved."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Page
from pytest_django.live_server_helper import LiveServer

from kinetics_db.web.marks import shape
from tests.browser.chart_pages import SPECIES
from tests.browser.waiting import until

DRAWN = "figure.chart[data-state=drawn]"
SVG = "{http://www.w3.org/2000/svg}"
SECONDS = 0.5
PIXELS = """(canvas) => {
  const copy = Object.assign(document.createElement("canvas"), { width: canvas.width, height: canvas.height });
  const context = copy.getContext("2d", { willReadFrequently: true });
  context.drawImage(canvas, 0, 0);
  const { data } = context.getImageData(0, 0, canvas.width, canvas.height);
  const colours = new Map();
  for (let i = 0; i < data.length; i += 4) {
    if (data[i + 3] < 255) continue;
    const colour = `${data[i]},${data[i + 1]},${data[i + 2]}`;
    const row = Math.floor(i / 4 / canvas.width);
    const [count, top] = colours.get(colour) ?? [0, row];
    colours.set(colour, [count + 1, top, row]);
  }
  return Object.fromEntries(colours);
}"""
Open = Callable[..., Page]


@pytest.fixture(autouse=True)
def _pages_of_the_test(settings: Any) -> None:
    settings.ROOT_URLCONF = "tests.browser.chart_pages"


@pytest.fixture(scope="module")
def server() -> Iterator[LiveServer]:
    """These pages need no database, so none has to be emptied after each test."""
    server = LiveServer("127.0.0.1")
    yield server
    server.stop()


@pytest.fixture
def server_address(server: LiveServer) -> str:
    return str(server.url)


def opened(open_page: Open, which: str, **options: Any) -> Page:
    page = open_page(f"/charts/{which}/", **options)
    page.wait_for_selector(DRAWN)
    return page


def pixels(page: Page) -> dict[str, int]:
    """Pixels of the first chart by their colour, 'r,g,b'."""
    found = page.locator(".chart canvas").first.evaluate(PIXELS)
    return {colour: count for colour, (count, _, _) in found.items()}


def height_of(page: Page, colour: str) -> int:
    """From the highest to the lowest pixel of a colour in the first chart."""
    _, top, bottom = page.locator(".chart canvas").first.evaluate(PIXELS)[colour]
    return bottom - top


def colour_of(page: Page, name: str) -> str:
    """A colour of the style sheet as 'r,g,b'."""
    text = page.evaluate("(name) => getComputedStyle(document.documentElement).getPropertyValue(name)", name)
    return ",".join(str(int(text.strip()[i : i + 2], 16)) for i in (1, 3, 5))


def ticks(page: Page) -> list[str]:
    """The first and last time that the first chart shows, as its slider tells them."""
    plot = page.locator(".chart-plot").first
    plot.focus()
    seen = []
    for key in ("Home", "End"):
        page.keyboard.press(key)
        seen.append(str(plot.get_attribute("aria-valuenow")))
    return seen


def button(page: Page, name: str) -> Any:
    return page.locator(".chart").first.get_by_role("button", name=name, exact=True)


def saved(page: Page, name: str, to: Path) -> Path:
    with page.expect_download() as download:
        button(page, name).click()
    path = to / download.value.suggested_filename
    download.value.save_as(path)
    return path


def test_thirty_five_runs_of_six_species_are_drawn_in_half_a_second(open_page: Open) -> None:
    page = open_page("/charts/none/")
    taken = []
    for _ in range(6):  # other processes share this machine: the quickest of a few counts
        page.goto("/charts/many/")
        page.wait_for_selector(DRAWN)
        page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
        until(lambda: page.locator(DRAWN).count() == 35)
        found = page.evaluate(
            "performance.getEntriesByName('charts').map((m) => [m.duration, m.detail.drawn])"
        )
        assert sum(drawn for _, drawn in found) == 35
        taken.append(sum(duration for duration, _ in found) / 1000)
        if taken[-1] < SECONDS:
            break
    empty = page.evaluate(
        f"""[...document.querySelectorAll('.chart canvas')].filter((canvas) => {{
            const colours = ({PIXELS})(canvas);
            return Object.keys(colours).length < 10;
        }}).length"""
    )
    assert empty == 0
    assert min(taken) < SECONDS


def test_charts_far_below_wait_until_they_come_near(open_page: Open) -> None:
    page = opened(open_page, "many")
    assert 0 < page.locator(DRAWN).count() < 35
    last = page.locator("figure.chart").last
    last.scroll_into_view_if_needed()
    until(lambda: last.get_attribute("data-state") == "drawn")


def test_every_species_has_its_colour_and_can_be_switched_off_by_the_keyboard(open_page: Open) -> None:
    page = opened(open_page, "one")
    blue, orange = colour_of(page, "--c0"), colour_of(page, "--c1")
    before = pixels(page)
    assert before[blue] > 100 and before[orange] > 100
    switch = button(page, SPECIES[0])
    assert switch.get_attribute("aria-pressed") == "true"
    switch.focus()
    page.keyboard.press("Enter")
    assert switch.get_attribute("aria-pressed") == "false"
    after = pixels(page)
    assert after.get(blue, 0) == 0 and after[orange] > 100
    page.keyboard.press("Space")
    assert switch.get_attribute("aria-pressed") == "true"
    assert pixels(page)[blue] > 100


def test_all_species_may_be_switched_off_and_on_again(open_page: Open) -> None:
    page = opened(open_page, "plain")
    for name in ("A", "B", "A", "B"):
        button(page, name).click()
    assert pixels(page)[colour_of(page, "--c0")] > 10


def test_markers_of_page_and_server_are_the_same(open_page: Open) -> None:
    page = opened(open_page, "one")
    drawn = page.locator(".chart-species .mark").evaluate_all(
        "(all) => all.map((mark) => mark.getAttribute('d'))"
    )
    numbers = [[float(n) for n in re.findall(r"-?\d+\.\d", d)] for d in drawn]
    expected = [
        [float(n) for n in re.findall(r"-?\d+\.\d", shape(i)[1](7, 7, 4.5))] for i in range(len(SPECIES))
    ]
    assert len(drawn) == len(SPECIES)
    for found, wanted in zip(numbers, expected, strict=True):
        assert found == pytest.approx(wanted, abs=0.11)


def test_pointing_at_the_plot_tells_every_species_value_with_its_unit(open_page: Open) -> None:
    page = opened(open_page, "plain")
    box = page.locator(".u-over").bounding_box()
    assert box is not None
    page.mouse.move(box["x"] + 0.5 * box["width"], box["y"] + 50)
    assert page.locator(".chart-at").inner_text() == "at 20 min, in mmol/L"
    # A has no value at 20 min: its nearest point is told, with its time.
    assert page.locator(".chart-value").all_inner_texts() == ["80.0(4.0) at 10", "30"]


def test_the_plot_is_read_by_arrow_keys(open_page: Open) -> None:
    page = opened(open_page, "plain")
    plot = page.locator(".chart-plot")
    plot.focus()
    page.keyboard.press("ArrowRight")
    assert plot.get_attribute("aria-valuenow") == "0"
    page.keyboard.press("ArrowRight")
    assert plot.get_attribute("aria-valuetext") == "at 10 min, in mmol/L: A 80.0(4.0), B 10, left out"
    page.keyboard.press("End")
    page.keyboard.press("ArrowLeft")
    assert plot.get_attribute("aria-valuenow") == "20"


def test_dragging_chooses_a_time_and_a_button_or_double_click_gives_the_whole_back(open_page: Open) -> None:
    page = opened(open_page, "plain")
    box = page.locator(".u-over").bounding_box()
    assert box is not None
    for give_back in (
        lambda: button(page, "Whole time").click(),
        lambda: page.mouse.dblclick(box["x"] + 100, box["y"] + 100),
    ):
        assert ticks(page) == ["0", "40"]
        assert button(page, "Whole time").is_disabled()
        page.mouse.move(box["x"] + 0.2 * box["width"], box["y"] + 60)
        page.mouse.down()
        page.mouse.move(box["x"] + 0.4 * box["width"], box["y"] + 70, steps=4)
        page.mouse.move(box["x"] + 0.6 * box["width"], box["y"] + 70, steps=4)
        page.mouse.up()
        assert ticks(page) == ["10", "20"]
        assert button(page, "Whole time").is_enabled()
        give_back()
    assert ticks(page) == ["0", "40"]


def test_zooming_works_without_dragging(open_page: Open) -> None:
    page = opened(open_page, "plain")
    page.locator(".chart-plot").focus()
    page.keyboard.press("ArrowRight")
    page.keyboard.press("ArrowRight")
    button(page, "Zoom in").click()
    assert ticks(page) == ["0", "20"]
    page.keyboard.press("Escape")
    assert ticks(page) == ["0", "40"]


def test_log_axes_leave_out_what_has_no_logarithm_and_say_so(open_page: Open) -> None:
    page = opened(open_page, "plain")
    linear = pixels(page)
    button(page, "Log concentration").click()
    note = page.locator(".chart-note")
    assert "Not on the log axis: 1 point at 0 or below." in note.inner_text()
    assert button(page, "Log concentration").get_attribute("aria-pressed") == "true"
    assert pixels(page) != linear
    button(page, "Log time").click()
    assert "Not on the log axis: 2 points at time 0 or before." in note.inner_text()
    assert ticks(page) == ["10", "40"]
    button(page, "Log concentration").click()
    button(page, "Log time").click()
    assert "log axis" not in note.inner_text()
    assert pixels(page) == linear


def test_traces_get_an_axis_of_their_own_on_request(open_page: Open) -> None:
    page = opened(open_page, "kinds")
    sky = colour_of(page, "--c5")
    before = height_of(page, sky)
    button(page, "Trace species on own axis").click()
    assert "On the right axis: trace & tail." in page.locator(".chart-note").first.inner_text()
    assert before < 15 and height_of(page, sky) > 150
    second = page.locator(".chart").nth(1)
    assert second.get_by_role("button", name="Trace species on own axis").count() == 0


def test_the_svg_holds_one_group_for_each_point(open_page: Open, tmp_path: Path) -> None:
    page = opened(open_page, "plain")
    path = saved(page, "Save SVG", tmp_path)
    assert path.name == "two-three.svg"
    root = ElementTree.parse(path).getroot()
    assert root.find(f"{SVG}title").text == "Two & <three>"  # type: ignore[union-attr]
    groups = [g for g in root.iter(f"{SVG}g") if "point" in g.get("class", "").split()]
    assert len(groups) == 3 + 4
    assert [len(g.findall(f"{SVG}path[@class='mark']")) for g in groups] == [1] * 7
    assert sum("left-out" in g.get("class", "") for g in groups) == 1
    assert len([g for g in groups if g.find(f"{SVG}path[@class='bar']") is not None]) == 3
    texts = [t.text for t in root.iter(f"{SVG}text")]
    assert {"time / min", "concentration / (mmol/L)", "A", "B"} <= set(texts)
    assert groups[0].find(f"{SVG}title").text == "A: 100.0(4.0) mmol/L at 0 min"  # type: ignore[union-attr]
    button(page, "B").click()
    again = ElementTree.parse(saved(page, "Save SVG", tmp_path)).getroot()
    assert len([g for g in again.iter(f"{SVG}g") if g.get("class") == "point"]) == 3


def test_the_svg_of_a_fit_has_a_curve_for_each_species(open_page: Open, tmp_path: Path) -> None:
    page = opened(open_page, "one")
    button(page, "Trace species on own axis").click()
    button(page, "Log time").click()
    root = ElementTree.parse(saved(page, "Save SVG", tmp_path)).getroot()
    curves = [p for p in root.iter(f"{SVG}path") if p.get("class") == "curve"]
    assert len(curves) == len(SPECIES)
    assert all(p.get("d", "").count("L") > 100 and "NaN" not in p.get("d", "") for p in curves)
    assert "concentration / (mmol/L), traces" in [t.text for t in root.iter(f"{SVG}text")]


def test_the_png_and_the_csv_are_saved(open_page: Open, tmp_path: Path) -> None:
    page = opened(open_page, "plain")
    path = saved(page, "Save PNG", tmp_path)
    data = path.read_bytes()
    assert path.name == "two-three.png" and data[:8] == b"\x89PNG\r\n\x1a\n"
    width, height = (int.from_bytes(data[i : i + 4], "big") for i in (16, 20))
    assert width > 500 and height == 340 and len(data) > 5000
    with page.expect_download() as download:
        page.get_by_role("link", name="CSV").click()
    assert Path(download.value.path()).read_text() == "time / min,A\n0,100\n"


def test_residuals_and_predictions_are_drawn_too(open_page: Open) -> None:
    page = opened(open_page, "kinds")
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    second, third = page.locator(".chart").nth(1), page.locator(".chart").nth(2)
    assert "Dashed: ±2" in second.locator(".chart-note").inner_text()
    assert second.get_by_role("button", name="Log concentration").count() == 0
    assert third.locator("canvas").evaluate(PIXELS)[colour_of(page, "--c1")][0] > 100
    third.get_by_role("button", name="Log concentration").click()
    third.locator(".chart-plot").focus()
    page.keyboard.press("End")
    assert third.locator(".chart-at").inner_text() == "at 60 min, in mmol/L"


def test_dark_and_light_differ_and_follow_the_readers_choice_at_once(open_page: Open) -> None:
    page = opened(open_page, "one", color_scheme="light")
    light = pixels(page)
    page.emulate_media(color_scheme="dark")
    until(lambda: pixels(page) != light)
    blue = colour_of(page, "--c0")
    assert pixels(page)[blue] > 100 and light.get(blue, 0) == 0
    page.emulate_media(color_scheme="light")
    until(lambda: pixels(page) == light)


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_nothing_of_a_chart_is_out_of_reach_or_too_faint(open_page: Open, scheme: Any) -> None:
    page = opened(open_page, "kinds", color_scheme=scheme)
    button(page, "Trace species on own axis").click()
    button(page, SPECIES[1]).click()
    found = Axe().run(page, context=".chart")
    assert [(v["id"], [n["html"] for n in v["nodes"]]) for v in found.response["violations"]] == []


def test_a_chart_fits_the_window_when_that_changes(open_page: Open) -> None:
    page = opened(open_page, "one")
    wide = page.locator(".chart canvas").evaluate("(canvas) => canvas.width")
    page.set_viewport_size({"width": 640, "height": 900})
    until(lambda: page.locator(".chart canvas").evaluate("(canvas) => canvas.width") < wide)
    assert page.evaluate("document.documentElement.scrollWidth") <= 640


def test_charts_that_come_later_are_drawn_and_those_that_go_are_forgotten(open_page: Open) -> None:
    page = open_page("/charts/none/")
    for _ in range(2):
        page.get_by_role("button", name="More").click()
        page.wait_for_selector(DRAWN)
        until(lambda: page.locator("#part .chart canvas").count() == 1)
    assert page.locator("#part .chart-at").count() == 1


def test_new_numbers_keep_what_the_reader_chose(open_page: Open) -> None:
    page = opened(open_page, "plain")
    button(page, "B").click()
    page.locator("figure.chart").evaluate(
        """(figure) => {
            const data = JSON.parse(figure.querySelector("script").textContent);
            data.series[0].y = [200, 160, 120, 80];
            figure.dispatchEvent(new CustomEvent("chart:data", { detail: data }));
        }"""
    )
    assert button(page, "B").get_attribute("aria-pressed") == "false"
    page.locator(".chart-plot").focus()
    page.keyboard.press("Home")
    assert page.locator(".chart-value").first.inner_text() == "200.0(4.0)"


def test_without_scripts_the_page_leads_to_the_numbers(open_page: Open) -> None:
    page = open_page("/charts/plain/", java_script_enabled=False)
    assert (
        page.get_by_role("link", name="All numbers of this chart as CSV").get_attribute("href")
        == "/charts/all.csv"
    )
    assert "A: 3 points, from 100 to 40 mmol/L between 0 and 40 min." in page.locator(".chart").inner_text()
