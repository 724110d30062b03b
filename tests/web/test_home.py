"""The page of projects, and making one."""

from __future__ import annotations

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.projects.models import Project
from kinetics_db.projects.services import create_project
from kinetics_db.runs.entry import Amount
from tests.factories.flow import lines, make_run
from tests.factories.people import make_member, make_user
from tests.web.reading import html_of, text_of
from tests.web.study import RIGHT, Study

ADDRESS = "/projects/new/"
MOST_QUERIES = 5


def test_home_lists_only_the_projects_of_the_person(client: Client, study: Study) -> None:
    client.force_login(make_user("stranger"))
    page = html_of(client, "/")
    assert "Oxidation" not in page
    assert "You are not a member of any project." in page
    client.force_login(make_member(study.project, "reader"))
    page = html_of(client, "/")
    assert "Oxidation of an alcohol" in page
    assert "your role: reader" in text_of(page)


def test_home_counts_runs_and_fits(browser: Client, fitted: Study) -> None:
    page = html_of(browser, "/")
    text = text_of(page)
    assert "2 runs" in text and "waiting for a file" not in text
    assert "0 fits waiting or running" in text
    assert "2 fits finished" in text
    assert "stale" not in text


def test_home_says_which_runs_wait_and_for_what(browser: Client, study: Study) -> None:
    from kinetics_db.measurements.services import store_file

    study.run("K01")
    empty = make_run(study.user, study.project.pk, "K02", {"alcohol": Amount(0.1, "mol/L")})
    filed = make_run(study.user, study.project.pk, "K03", {"alcohol": Amount(0.1, "mol/L")})
    store_file(
        user=study.user, run=filed, name="a.csv", data=lines(("time / s", "H1"), (0, 1), (1, 2)).encode()
    )
    html = html_of(browser, "/")
    text = text_of(html)
    assert "3 runs , 2 waiting for a file or its reduction" in text
    assert f'<a href="/runs/{empty.pk}/files/new/">waits for its instrument file</a>' in html
    assert f'<a href="/runs/{filed.pk}/">waits for its reduction</a>' in html
    assert text.index("K03 in Oxidation") < text.index("K02 in Oxidation") < text.index("K01 in Oxidation")


def test_where_one_left_off_holds_only_ones_own_runs(client: Client, study: Study) -> None:
    study.run("K01")
    client.force_login(make_member(study.project, "contributor"))
    assert "Where you left off" not in html_of(client, "/")


def test_a_fit_under_way_is_counted(browser: Client, study: Study) -> None:
    study.run("K01")
    study.fit("first order", RIGHT, study.dataset(), compute=False)
    assert "1 fit waiting or running" in text_of(html_of(browser, "/"))


def test_the_number_of_queries_of_home_does_not_grow_with_the_projects(browser: Client, study: Study) -> None:
    study.run("K01")
    for i in range(5):
        create_project(user=study.user, slug=f"more-{i}", name="More")
    with CaptureQueriesContext(connection) as queries:
        html_of(browser, "/")
    assert len(queries) <= MOST_QUERIES, "\n".join(q["sql"][:200] for q in queries)


def test_more_projects_than_fit_on_a_page_are_reached_by_its_links(browser: Client, study: Study) -> None:
    for i in range(55):
        create_project(user=study.user, slug=f"more-{i:02d}", name=f"More {i:02d}")
    first = html_of(browser, "/")
    assert "More 49" in first and "More 50" not in first and "Oxidation" not in first
    (after,) = [part.split('"')[0] for part in first.split('rel="next" href="')[1:]]
    second = html_of(browser, f"/{after}")
    assert "More 50" in second and "Oxidation" in second and "More 49" not in second


def test_a_damaged_cursor_is_refused_in_words(browser: Client, study: Study) -> None:
    assert "the cursor is damaged" in text_of(html_of(browser, "/?cursor=x", status=400)).lower()


def test_a_project_is_made_with_a_short_name_from_its_name(browser: Client, study: Study) -> None:
    response = browser.post(ADDRESS, {"name": "Oxidation, again", "description": "Two lines\nof it"})
    made = Project.objects.get(slug="oxidation-again")
    assert response["Location"] == f"/projects/{made.slug}/"
    assert (made.name, made.description) == ("Oxidation, again", "Two lines\nof it")
    page = text_of(html_of(browser, response["Location"]))
    assert "is made, and you own it" in page and "your role: owner" in page


def test_a_short_name_can_be_chosen(browser: Client, study: Study) -> None:
    browser.post(ADDRESS, {"name": "Again", "slug": "second-study"})
    assert Project.objects.filter(slug="second-study").exists()


@pytest.mark.parametrize(
    ("sent", "said"),
    [
        ({}, "A project needs a name"),
        ({"name": "x" * 10**6}, "are too many"),
        ({"name": "a\x00b"}, "Null characters are not allowed"),
        ({"name": "a\u0007b"}, "cannot be stored"),
        ({"name": "Fine", "slug": "Not Fine"}, "cannot be a project&#x27;s short name"),
        ({"name": "Fine", "slug": "new"}, "stands for a page of its own"),
        ({"name": "Fine", "slug": "oxidation"}, "There is a project &#x27;oxidation&#x27; already"),
        ({"name": "Fine", "description": "x" * 20_001}, "are too many"),
    ],
)
def test_a_project_that_cannot_be_made_comes_back_with_its_problem(
    browser: Client, study: Study, sent: dict[str, str], said: str
) -> None:
    response = browser.post(ADDRESS, sent)
    html = response.content.decode()
    assert response.status_code == 422
    assert said in html
    assert Project.objects.count() == 1
    if 0 < len(sent.get("description", "")) < 30_000:
        assert sent["description"] in html


def test_what_was_typed_is_kept_and_escaped(browser: Client, study: Study) -> None:
    response = browser.post(
        ADDRESS, {"name": "<b>café & 酸化</b>", "slug": "<script>", "description": "</textarea>"}
    )
    html = response.content.decode()
    assert response.status_code == 422
    assert "&lt;b&gt;café &amp; 酸化&lt;/b&gt;" in html
    assert "<b>café" not in html and "<script>" not in html and html.count("</textarea>") == 1


def test_a_stranger_makes_projects_of_his_own_and_nobody_does_so_unseen(client: Client, db: None) -> None:
    refused = client.post(ADDRESS, {"name": "X"})
    assert refused.status_code == 403 and "You are logged out" in refused.content.decode()
    assert not Project.objects.exists()
    client.force_login(make_user("otto"))
    client.post(ADDRESS, {"name": "Of Otto"})
    assert Project.objects.get().created_by.username == "otto"
