"""Logging in and out, and what those who are not logged in may see."""

from __future__ import annotations

import pytest
from django.test import Client

from kinetics_db.web import throttle
from tests.factories.people import make_member, make_user
from tests.web.study import Study

PASSWORD = "a long password 1"


def log_in(client: Client, name: str, password: str, address: str = "127.0.0.1") -> int:
    data = {"username": name, "password": password}
    return client.post("/login/", data, REMOTE_ADDR=address).status_code


@pytest.mark.parametrize("address", ["/", "/projects/oxidation/"])
def test_every_page_asks_strangers_to_log_in_first(client: Client, study: Study, address: str) -> None:
    response = client.get(address)
    assert response.status_code == 302
    assert response["Location"] == f"/login/?next={address}"


def test_after_login_one_is_where_one_wanted_to_go(client: Client, study: Study) -> None:
    data = {"username": "mira", "password": PASSWORD, "next": "/projects/oxidation/"}
    response = client.post("/login/", data)
    assert response["Location"] == "/projects/oxidation/"


def test_login_never_leads_to_another_site(client: Client, study: Study) -> None:
    data = {"username": "mira", "password": PASSWORD, "next": "https://elsewhere.example/"}
    assert client.post("/login/", data)["Location"] == "/"


def test_a_wrong_password_is_refused_in_words(client: Client, study: Study) -> None:
    response = client.post("/login/", {"username": "mira", "password": "wrong"})
    assert response.status_code == 200
    assert "do not belong together" in response.content.decode()
    assert client.get("/").status_code == 302


def test_the_eleventh_failed_try_is_refused_even_with_the_right_password(
    client: Client, study: Study
) -> None:
    for _ in range(throttle.MOST_FAILURES):
        assert log_in(client, "mira", "wrong") == 200
    response = client.post("/login/", {"username": "mira", "password": PASSWORD})
    assert response.status_code == 429
    assert response["Retry-After"] == "900"
    assert "Too many failed tries" in response.content.decode()
    assert client.get("/").status_code == 302


def test_another_spelling_of_the_name_does_not_give_further_tries(client: Client, study: Study) -> None:
    for _ in range(throttle.MOST_FAILURES):
        log_in(client, "mira", "wrong")
    assert log_in(client, " MIRA", "wrong") == 429


def test_other_accounts_and_other_addresses_are_not_held_up(client: Client, study: Study) -> None:
    make_user("otto")
    for _ in range(throttle.MOST_FAILURES):
        log_in(client, "mira", "wrong")
    assert log_in(client, "otto", PASSWORD) == 302
    client.logout()
    assert log_in(client, "mira", PASSWORD, address="192.0.2.7") == 302


def test_a_success_forgets_the_failures_before_it(client: Client, study: Study) -> None:
    for _ in range(2):
        for _ in range(throttle.MOST_FAILURES - 1):
            log_in(client, "mira", "wrong")
        assert log_in(client, "mira", PASSWORD) == 302
        client.logout()


def test_tries_are_counted_before_the_password_is_looked_at(study: Study) -> None:
    begun = [
        throttle.begin_try(account="mira", address="192.0.2.1") for _ in range(throttle.MOST_FAILURES + 2)
    ]
    assert begun == [True] * throttle.MOST_FAILURES + [False] * 2


def test_an_empty_form_costs_no_try(client: Client, study: Study) -> None:
    for _ in range(throttle.MOST_FAILURES + 1):
        assert log_in(client, "mira", "") == 200
    assert log_in(client, "mira", PASSWORD) == 302


def test_logging_out_needs_a_form_not_a_link(browser: Client) -> None:
    assert browser.get("/logout/").status_code == 405
    assert browser.get("/").status_code == 200
    assert browser.post("/logout/")["Location"] == "/login/"
    assert browser.get("/").status_code == 302


def test_a_form_without_its_token_is_refused_in_the_same_look(study: Study) -> None:
    strict = Client(enforce_csrf_checks=True)
    response = strict.post("/login/", {"username": "mira", "password": PASSWORD})
    assert response.status_code == 403
    assert "The form was refused" in response.content.decode()
    assert "ratewright.css" in response.content.decode()


def test_browsers_keep_no_page_of_a_person(browser: Client) -> None:
    assert "no-store" in browser.get("/")["Cache-Control"]


def test_home_lists_only_the_projects_of_the_person(client: Client, study: Study) -> None:
    client.force_login(make_user("stranger"))
    page = client.get("/").content.decode()
    assert "Oxidation" not in page
    assert "You are not a member of any project." in page
    client.force_login(make_member(study.project, "reader"))
    assert "Oxidation of an alcohol" in client.get("/").content.decode()


def test_home_counts_runs_and_fits(browser: Client, fitted: Study) -> None:
    page = browser.get("/").content.decode()
    assert "2 runs" in page
    assert "0 fits waiting or running" in page
    assert "2 fits finished" in page
    assert "stale" not in page


def test_the_number_of_queries_of_home_does_not_grow_with_the_projects(
    browser: Client, study: Study, django_assert_max_num_queries: object
) -> None:
    from kinetics_db.projects.services import create_project

    for i in range(5):
        create_project(user=study.user, slug=f"more-{i}", name="More")
    with django_assert_max_num_queries(8):  # type: ignore[operator]
        browser.get("/")
