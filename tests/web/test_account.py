"""Logging in and out, what those who are not logged in may see, and one's own account."""

from __future__ import annotations

import re

import pytest
from django.test import Client
from django.utils.html import escape

from kinetics_db.accounts.models import User
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.web import throttle
from tests.factories.people import make_user
from tests.web.reading import html_of, text_of
from tests.web.study import Study

PASSWORD = "a long password 1"


def log_in(client: Client, name: str, password: str, address: str = "127.0.0.1") -> int:
    data = {"username": name, "password": password}
    return client.post("/login/", data, REMOTE_ADDR=address).status_code


@pytest.mark.parametrize(
    "address",
    [
        "/", "/search/", "/projects/new/", "/account/", "/account/tokens/", "/projects/oxidation/",
        "/projects/oxidation/under-way/", "/projects/oxidation/members/", "/projects/oxidation/evidence/",
        "/projects/oxidation/evidence.csv",
    ],
)  # fmt: skip
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


ACCOUNT = "/account/"
NEW = "quite another phrase 7"


def zone_of(study: Study) -> str:
    return str(User.objects.get(pk=study.user.pk).time_zone)


def password_sent(**changes: str) -> dict[str, str]:
    return {"change": "password", "current": PASSWORD, "password": NEW, "again": NEW} | changes


def test_the_account_page_shows_the_name_and_the_zone(browser: Client) -> None:
    html = html_of(browser, ACCOUNT)
    assert "You are mira" in text_of(html)
    assert 'value="UTC"' in html and '<option value="Europe/Helsinki">' in html


def test_a_time_zone_is_chosen_and_dates_follow(browser: Client, study: Study) -> None:
    response = browser.post(ACCOUNT, {"change": "time zone", "time_zone": "Asia/Kolkata"})
    assert response["Location"] == ACCOUNT
    assert zone_of(study) == "Asia/Kolkata"
    html = html_of(browser, ACCOUNT)
    assert "Dates are now shown as in Asia/Kolkata" in text_of(html) and " IST</time>" in html


@pytest.mark.parametrize(
    "zone",
    ["", "Nowhere/Else", "../../etc/passwd", "<script>x</script>", "a\x00b", "x" * 10**6, "1e400", "Ä/Ö"],
)
def test_a_zone_that_does_not_exist_comes_back(browser: Client, study: Study, zone: str) -> None:
    response = browser.post(ACCOUNT, {"change": "time zone", "time_zone": zone})
    html = response.content.decode()
    assert response.status_code == 422
    assert 'id="id_time_zone_error"' in html and "<script>x" not in html
    if zone.isascii() and zone.isprintable() and 0 < len(zone) < 100:
        assert f'value="{escape(zone)}"' in html
    assert zone_of(study) == "UTC"


def test_a_password_is_changed_and_other_places_are_logged_out(browser: Client, study: Study) -> None:
    elsewhere = Client()
    elsewhere.force_login(study.user)
    assert browser.post(ACCOUNT, password_sent())["Location"] == ACCOUNT
    assert "Your password is changed" in text_of(html_of(browser, ACCOUNT))
    assert elsewhere.get(ACCOUNT).status_code == 302
    browser.logout()
    assert log_in(browser, "mira", PASSWORD) == 200
    assert log_in(browser, "mira", NEW) == 302
    entry = AuditEntry.objects.latest("sequence")
    assert (entry.actor, entry.verb, entry.record_label) == ("mira", "changed password", "mira")


@pytest.mark.parametrize(
    ("changes", "field", "said"),
    [
        ({"current": "wrong"}, "current", "This is not your current password"),
        ({"current": ""}, "current", "This is not your current password"),
        ({"password": "", "again": ""}, "password", "too short"),
        ({"password": "short", "again": "short"}, "password", "too short"),
        ({"password": PASSWORD, "again": PASSWORD}, "password", "that you have already"),
        ({"again": "different phrase 8"}, "again", "This is not the same"),
        ({"password": "x" * 10**6, "again": "x" * 10**6}, "password", "too long for a password"),
        ({"password": "a\x00b", "again": "a\x00b"}, "password", "Null characters"),
    ],
)
def test_a_password_that_cannot_be_is_refused_and_never_shown(
    browser: Client, study: Study, changes: dict[str, str], field: str, said: str
) -> None:
    response = browser.post(ACCOUNT, password_sent(**changes))
    html = response.content.decode()
    assert response.status_code == 422
    (wrong,) = re.findall(rf'<ul class="wrong" id="id_{field}_error">.*?</ul>', html, re.DOTALL)
    assert said in text_of(wrong)
    assert PASSWORD not in html and NEW not in html
    assert User.objects.get(pk=study.user.pk).check_password(PASSWORD)


def test_guesses_of_the_current_password_are_counted_like_failed_logins(
    browser: Client, study: Study
) -> None:
    for _ in range(throttle.MOST_FAILURES):
        assert browser.post(ACCOUNT, password_sent(current="wrong")).status_code == 422
    response = browser.post(ACCOUNT, password_sent())
    assert response.status_code == 422
    assert "Too many failed tries" in text_of(response.content.decode())
    assert User.objects.get(pk=study.user.pk).check_password(PASSWORD)


@pytest.mark.parametrize("change", ["", "name", "<b>"])
def test_a_form_that_does_not_say_what_it_changes_is_refused(browser: Client, change: str) -> None:
    response = browser.post(ACCOUNT, {"change": change, "time_zone": "Asia/Kolkata"})
    assert response.status_code == 422
    assert "does not say what is to be changed" in response.content.decode()


def test_the_account_page_costs_few_queries(browser: Client, django_assert_max_num_queries: object) -> None:
    with django_assert_max_num_queries(2):  # type: ignore[operator]
        browser.get(ACCOUNT)


def test_a_strangers_account_is_nobodys(client: Client, study: Study) -> None:
    assert client.get(ACCOUNT)["Location"] == "/login/?next=/account/"
    refused = client.post(ACCOUNT, password_sent())
    assert refused.status_code == 403 and "You are logged out" in refused.content.decode()
    assert User.objects.get(pk=study.user.pk).check_password(PASSWORD)
