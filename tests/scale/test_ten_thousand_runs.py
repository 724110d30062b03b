"""Ten thousand runs and a thousand fits: what pages, endpoints and filters cost in queries, time and bytes."""

from __future__ import annotations

import io
from collections.abc import Callable, Sequence
from datetime import UTC, datetime, timedelta
from typing import Any

import pyarrow.parquet as pq
import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext
from django.urls import URLPattern, reverse
from django.utils import timezone

from api import urls as api_urls
from kinetics_db.fits.models import Fit
from kinetics_db.jobs.models import Job
from kinetics_db.measurements.rows import RunRow, run_rows
from kinetics_db.paging import Page, page_of
from kinetics_db.projects.services import create_project
from kinetics_db.runs.models import Run
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found
from kinetics_db.web import urls as web_urls
from tests.factories.many import FIRST_DAY, concentration, kelvin
from tests.scale import bare
from tests.scale.by_hand import parquet_by_hand
from tests.scale.lists import (
    ENDPOINT_LISTS,
    ENDPOINTS_WITH_A_BOUND,
    MOST_QUERIES,
    OTHER_ENDPOINTS,
    OTHER_PAGES,
    PAGE_LISTS,
    PAGES_WITH_A_BOUND,
)
from tests.scale.reading import bytes_of_first_visit, next_page
from tests.scale.timing import is_quick, times_slower
from tests.scale.world import MECHANISMS, RUNS, TABLES, VERSIONS, World

pytestmark = [pytest.mark.postgresql, pytest.mark.django_db]

LARGEST_VISIT = 500_000
REQUESTS = 40
SLOWEST_PAGE = 0.5
SLOWEST_ROWS = 0.05
FILTERS = (
    "",
    "[A]0 50..60 mM",
    "[A]0 50..60 mM, 30..50 degC",
    "[A]0 1 mM, [B]0 2 mM, 20 degC, no control, after 2026-02-01",
    "M00999",
    "m0099",
    "control blank",
    "has table",
    "no table",
    "[nothing]0",
    "code nothing",
    "by nobody",
    "after 2026-01-05, before 2026-01-06",
)
"""Among them those that find nearly all and those that find nothing, for which no page can end early."""


def address(world: World, patterns: Sequence[Any], name: str, query: str = "") -> str:
    pattern = next(p for p in patterns if isinstance(p, URLPattern) and p.name == name)
    needed = {key: world.keys[key] for key in pattern.pattern.converters}
    space = "api" if patterns is api_urls.urlpatterns else "web"
    return reverse(f"{space}:{name}", kwargs=needed) + (f"?{query}" if query else "")


def queries_of(client: Client, where: str) -> tuple[list[str], Any]:
    """What an address asks the database, and its answer."""
    with CaptureQueriesContext(connection) as asked:
        response = client.get(where)
    assert response.status_code == 200, where
    return [q["sql"][:200] for q in asked], response


# Every list


def test_the_tables_know_every_page_and_every_endpoint() -> None:
    pages = {*PAGE_LISTS, *PAGES_WITH_A_BOUND, *OTHER_PAGES}
    endpoints = {*ENDPOINT_LISTS, *ENDPOINTS_WITH_A_BOUND, *OTHER_ENDPOINTS}
    assert {p.name for p in web_urls.urlpatterns} == pages
    assert {p.name for p in api_urls.urlpatterns} == endpoints


def test_every_endpoint_that_is_described_as_a_list_is_in_the_table() -> None:
    from drf_spectacular.generators import SchemaGenerator

    described = SchemaGenerator().get_schema(request=None, public=True)["paths"]
    paged = {
        path
        for path, methods in described.items()
        if any(p["name"] == "cursor" for p in methods.get("get", {}).get("parameters", ()))
    }
    assert len(paged) == len(ENDPOINT_LISTS) + len(ENDPOINTS_WITH_A_BOUND), sorted(paged)


@pytest.mark.usefixtures("nothing_kept")
@pytest.mark.parametrize("name", PAGE_LISTS)
def test_every_page_of_a_list_takes_few_queries(world: World, browser: Client, name: str) -> None:
    first_and_later_pages_cost_the_same(browser, address(world, web_urls.urlpatterns, name))


@pytest.mark.usefixtures("nothing_kept")
@pytest.mark.parametrize("name", ENDPOINT_LISTS)
def test_every_list_of_rest_takes_few_queries(world: World, browser: Client, name: str) -> None:
    # With the session, as through a token only that token is listed.
    first_and_later_pages_cost_the_same(
        browser, address(world, api_urls.urlpatterns, name, ENDPOINT_LISTS[name])
    )


def first_and_later_pages_cost_the_same(client: Client, where: str) -> None:
    client.get("/")  # the session is in the cache
    first, response = queries_of(client, where)
    later = next_page(where, response)
    assert later is not None, "the world has no second page of this list"
    second, _ = queries_of(client, later)
    assert len(first) <= MOST_QUERIES, "\n".join(first)
    assert len(second) == len(first), "\n".join(second)


@pytest.mark.parametrize("name", PAGES_WITH_A_BOUND)
def test_pages_of_many_things_take_few_queries_and_little_time(
    world: World, browser: Client, name: str
) -> None:
    where = address(world, web_urls.urlpatterns, name, "open=" if name == "under-way" else "")
    browser.get("/")
    queries, _ = queries_of(browser, where)
    assert len(queries) <= PAGES_WITH_A_BOUND[name], "\n".join(queries)
    assert is_quick(lambda: browser.get(where), seconds=SLOWEST_PAGE)


@pytest.mark.parametrize("name", ENDPOINTS_WITH_A_BOUND)
def test_endpoints_of_many_things_take_few_queries(world: World, script: Client, name: str) -> None:
    query, most = ENDPOINTS_WITH_A_BOUND[name]
    where = address(world, api_urls.urlpatterns, name, query)
    script.get(where)  # notes that the token was used
    assert len(queries_of(script, where)[0]) <= most


def test_a_first_visit_of_any_page_is_small(world: World, browser: Client) -> None:
    sizes = {}
    for pattern in web_urls.urlpatterns:
        if not set(pattern.pattern.converters) <= set(world.keys):
            continue
        response = browser.get(address(world, web_urls.urlpatterns, pattern.name))
        if response.status_code == 200 and response.headers["Content-Type"].startswith("text/html"):
            sizes[pattern.name] = bytes_of_first_visit(response)
    print(*sorted(sizes.items(), key=lambda found: -found[1]), sep="\n")  # noqa: T201
    assert {*PAGE_LISTS, "home", "project", "evidence", "run", "fit", "dataset", "version"} <= set(sizes)
    assert max(sizes.values()) < LARGEST_VISIT, sizes


# Time


@pytest.mark.parametrize("query", ["", "by=oldest"])
def test_a_page_of_runs_takes_three_times_a_bare_page_at_most(
    world: World, browser: Client, settings: Any, query: str
) -> None:
    """``oldest`` begins with runs that have tables, so its page has fifty small curves."""
    settings.ROOT_URLCONF = "tests.scale.bare"
    assert slower_than_bare(browser, f"/projects/big/runs/?{query}", "page") <= 3


@pytest.mark.parametrize("query", ["", "order=oldest"])
def test_a_page_of_runs_over_rest_takes_three_times_a_bare_answer_at_most(
    world: World, script: Client, settings: Any, query: str
) -> None:
    settings.ROOT_URLCONF = "tests.scale.bare"
    assert slower_than_bare(script, f"/api/v1/runs/?{query}", "endpoint") <= 3


def slower_than_bare(client: Client, where: str, kind: str) -> float:
    """Against a view that answers the same bytes, behind the same login or token and the same middleware."""
    bare.READY[kind] = client.get(where).content
    same = f"/bare/{kind}/"
    assert client.get(same).content == bare.READY[kind] and len(bare.READY[kind]) > 10_000
    ours, bares = [lambda: client.get(where)] * REQUESTS, [lambda: client.get(same)] * REQUESTS
    return times_slower(ours, bares, allowed=3)


def test_what_is_written_shows_at_once(world: World, browser: Client, script: Client) -> None:
    """Pages that are kept are kept only as long as nothing has been written."""
    places = ((browser, "/projects/big/runs/"), (script, "/api/v1/runs/"))
    before = [client.get(where).content for client, where in places]
    assert [client.get(where).content for client, where in places][1] == before[1]
    Run.objects.filter(code=f"M{RUNS - 1:06d}").update(sealed=timezone.now())
    create_project(user=world.owner, slug="another", name="Whatever is written")
    for client, where in places:
        assert b"sealed" in client.get(where).content.replace(b'"sealed":null', b"")


def test_no_page_of_a_walk_costs_more_than_the_first_ones(world: World, db: None) -> None:
    cursors: list[str | None] = [None]
    while (page := page_of_runs(world, cursor=cursors[-1])).next:
        cursors.append(page.next)
    assert len(cursors) == (RUNS + 2 + 49) // 50

    def shown(cursor: str | None) -> Callable[[], object]:
        return lambda: run_rows(page_of_runs(world, cursor=cursor).items)

    begin, end = [shown(c) for c in cursors[:10]] * 2, [shown(c) for c in cursors[-10:]] * 2
    assert times_slower(end, begin, allowed=2) <= 2


def test_a_filtered_page_with_all_that_its_rows_show_takes_less_than_50_ms(world: World, db: None) -> None:
    for text in FILTERS:
        for order in ("newest", "code"):
            work = lambda text=text, order=order: rows(world, text, order)  # noqa: E731
            assert is_quick(work, seconds=SLOWEST_ROWS), (text, order)


def test_pages_over_all_projects_are_quick_too(world: World, db: None) -> None:
    def anywhere() -> list[RunRow]:
        found = runs_found(user=world.owner, query=RunQuery.from_text("[A]0 50..60 mM"))
        return run_rows(page_of(found, order=RUN_ORDERS["newest"]).items)

    assert len(anywhere()) == 50
    assert is_quick(anywhere, seconds=SLOWEST_ROWS)


@pytest.mark.usefixtures("nothing_kept")
@pytest.mark.parametrize("where", ["/projects/big/runs/?by=oldest", "/api/v1/runs/?order=oldest"])
def test_a_page_of_runs_that_is_made_anew_is_quick_too(browser: Client, where: str) -> None:
    assert is_quick(lambda: browser.get(where), seconds=2 * SLOWEST_ROWS)


@pytest.mark.parametrize("text", ["M0099", "mechanism 01", "A", "nothing at all"])
def test_searches_answer_quickly(browser: Client, text: str) -> None:
    assert is_quick(lambda: browser.get("/search/", {"q": text}), seconds=SLOWEST_PAGE, tries=10)


def test_a_dataset_over_rest_takes_three_times_reading_its_rows_by_hand_at_most(
    world: World, script: Client
) -> None:
    number = int(str(world.keys["dataset_id"]))
    where = f"/api/v1/datasets/{number}/table.parquet"
    ours, by_hand = pq.read_table(io.BytesIO(script.get(where).content)), parquet_by_hand(number)
    assert ours.equals(pq.read_table(io.BytesIO(by_hand))) and ours.num_rows == 35 * 40
    work = [lambda: script.get(where)] * REQUESTS
    assert times_slower(work, [lambda: parquet_by_hand(number)] * REQUESTS, allowed=3) <= 3


# What is shown


def test_what_is_shown_is_the_newest(world: World, browser: Client) -> None:
    page = browser.get("/projects/big/").content.decode()
    assert f"{RUNS - TABLES + 1} for their instrument files" in page  # and the pattern run
    assert f"mechanism {MECHANISMS - 1:03d} v{VERSIONS}" in page
    assert f"{MECHANISMS * VERSIONS + 1 - 6} older versions are not shown here" in page
    grid = browser.get("/projects/big/evidence/").content.decode()
    assert grid.count('class="cell ') == 50 * 12


def test_work_asked_for_today_shows_among_a_thousand_fits(world: World, browser: Client) -> None:
    newest = Fit.objects.latest("pk")
    Job.objects.filter(subject_id=newest.pk).update(state="waiting", finished=None)
    Run.objects.filter(code="M009999").update(created=timezone.now() + timedelta(days=1))
    page = browser.get("/projects/big/").content.decode()
    assert f"?open={newest.pk}" in page
    assert page.index("M009999") < page.index("M009998")


def test_filters_find_exactly_what_was_put_in(world: World, db: None) -> None:
    expected = {
        f"M{i:06d}"
        for i in range(RUNS)
        if 0.0495 <= concentration(i) <= 0.0605 and 303.1 <= kelvin(i) <= 323.2 and i % 10
    }
    query = RunQuery.from_text("[A]0 49.5..60.5 mM, 303..324 K, no control, code m0")
    found = runs_found(user=world.owner, query=query)
    assert set(found.values_list("code", flat=True)) == expected
    assert len(expected) > 100


def test_days_cut_the_list_where_they_should(world: World, db: None) -> None:
    query = RunQuery.from_text("after 2026-01-05, before 2026-01-06, code M0")
    days = runs_found(user=world.owner, query=query).values_list("created", flat=True)
    assert min(days) >= datetime(2026, 1, 5, tzinfo=UTC) > FIRST_DAY
    assert max(days) < datetime(2026, 1, 6, tzinfo=UTC)
    assert len(days) == pytest.approx(24 * 60 / 17, abs=1)


def page_of_runs(world: World, text: str = "", order: str = "newest", cursor: str | None = None) -> Page[Run]:
    found = runs_found(user=world.owner, query=RunQuery.from_text(text), project_id=world.project.pk)
    return page_of(found, order=RUN_ORDERS[order], cursor=cursor)


def rows(world: World, *about: str) -> Sequence[RunRow]:
    return run_rows(page_of_runs(world, *about).items)
