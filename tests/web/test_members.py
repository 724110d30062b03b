"""People of a project."""

from __future__ import annotations

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.projects.selectors import role_in
from tests.factories.people import make_member, make_user
from tests.web.reading import html_of, text_of
from tests.web.study import Study

ADDRESS = "/projects/oxidation/members/"


def role(study: Study, user: object) -> str | None:
    return role_in(user=user, project_id=study.project.pk)  # type: ignore[arg-type]


def test_an_owner_gives_a_role_by_name(browser: Client, study: Study) -> None:
    otto = make_user("otto")
    assert browser.post(ADDRESS, {"username": "otto", "role": "contributor"})["Location"] == ADDRESS
    assert role(study, otto) == "contributor"
    text = text_of(html_of(browser, ADDRESS))
    assert "otto is now contributor of this project" in text
    browser.post(ADDRESS, {"username": "otto", "role": "reader"})
    assert role(study, otto) == "reader"


@pytest.mark.parametrize(
    ("sent", "said"),
    [
        ({}, "A role needs a username"),
        ({"username": "nobody", "role": "reader"}, "There is no active user 'nobody'"),
        ({"username": "<b>x</b>", "role": "reader"}, "There is no active user '<b>x</b>'"),
        ({"username": "x" * 10**6, "role": "reader"}, "are too many"),
        ({"username": "a\x00b", "role": "reader"}, "Null characters are not allowed"),
        ({"username": "otto", "role": "king"}, "'king' is not a role"),
        ({"username": "otto"}, "'' is not a role"),
        ({"username": "mira", "role": "reader"}, "A project keeps at least one owner"),
    ],
)
def test_what_cannot_be_comes_back_with_its_problem(
    browser: Client, study: Study, sent: dict[str, str], said: str
) -> None:
    make_user("otto")
    response = browser.post(ADDRESS, sent)
    html = response.content.decode()
    assert response.status_code == 422
    assert said in text_of(html.replace("<b>Ratewright</b>", ""))
    assert "<b>x" not in html
    if (
        0 < len(sent.get("username", "")) < 200
        and "<" not in sent["username"]
        and "\0" not in sent["username"]
    ):
        assert f'value="{sent["username"]}"' in html
    assert role(study, study.user) == "owner"


def test_an_owner_takes_a_role_away(browser: Client, study: Study) -> None:
    otto = make_member(study.project, "contributor", "otto")
    assert browser.post(ADDRESS, {"remove": "otto"})["Location"] == ADDRESS
    assert role(study, otto) is None
    assert "otto has no role in this project any more" in text_of(html_of(browser, ADDRESS))


def test_an_owner_who_leaves_is_led_to_the_other_projects(browser: Client, study: Study) -> None:
    make_member(study.project, "owner", "otto")
    assert browser.post(ADDRESS, {"remove": "mira"})["Location"] == "/"
    assert browser.get(ADDRESS).status_code == 404


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("mira", "A project keeps at least one owner"),
        ("nobody", "has no role in this project"),
        ("\x00", "cannot be stored"),
    ],
)
def test_a_role_that_cannot_be_taken_away_stays(browser: Client, study: Study, name: str, said: str) -> None:
    response = browser.post(ADDRESS, {"remove": name})
    assert response.status_code == 422
    assert said in text_of(response.content.decode())
    assert role(study, study.user) == "owner"


@pytest.mark.parametrize("own", ["reader", "contributor"])
def test_who_is_no_owner_sees_the_people_and_no_buttons(client: Client, study: Study, own: str) -> None:
    otto = make_member(study.project, own, "otto")
    client.force_login(otto)
    html = html_of(client, ADDRESS)
    assert "mira" in html and "Give the role" not in html and "away</button>" not in html
    for sent in ({"username": "otto", "role": "owner"}, {"remove": "mira"}):
        assert client.post(ADDRESS, sent).status_code == 403
    assert role(study, otto) == own and role(study, study.user) == "owner"


def test_strangers_find_nothing_and_change_nothing(client: Client, study: Study) -> None:
    stranger = make_user("stranger")
    assert client.get(ADDRESS).status_code == 302
    client.force_login(stranger)
    assert client.get(ADDRESS).status_code == 404
    assert client.post(ADDRESS, {"username": "stranger", "role": "owner"}).status_code == 404
    assert role(study, stranger) is None


def test_the_number_of_queries_does_not_grow_with_the_people(browser: Client, study: Study) -> None:
    for i in range(10):
        make_member(study.project, "reader", f"reader{i}")
    with CaptureQueriesContext(connection) as queries:
        html_of(browser, ADDRESS)
    assert len(queries) <= 5
