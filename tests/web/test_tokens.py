"""The page of access tokens."""

from __future__ import annotations

import re
from datetime import timedelta

import pytest
from django.contrib.sessions.models import Session
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from kinetics_db.accounts.models import AccessToken
from kinetics_db.accounts.selectors import token_of_secret
from kinetics_db.projects.access import issue_access_token
from tests.factories.people import make_project, make_user
from tests.web.reading import html_of, text_of
from tests.web.study import Study

ADDRESS = "/account/tokens/"


def day(days: int) -> str:
    return (timezone.localdate() + timedelta(days=days)).isoformat()


def sent(**changes: str) -> dict[str, str]:
    return {"name": "script", "scope": "read", "project": "", "expires": day(30)} | changes


def secret_in(html: str) -> str:
    (secret,) = re.findall(r'value="(rw_[\w-]{40,})"', html)
    return secret


def test_a_token_is_made_and_its_secret_shown_once(browser: Client, study: Study) -> None:
    response = browser.post(ADDRESS, sent(scope="write", project="oxidation"))
    html = response.content.decode()
    assert response.status_code == 200
    secret = secret_in(html)
    assert html.count(secret) == 1
    token = token_of_secret(secret)
    assert token is not None and token.user == study.user
    assert (token.scope, token.project_id) == ("write", study.project.pk)
    assert f"{token.expires:%Y-%m-%d %H:%M:%S}" == f"{day(30)} 23:59:59"
    assert "no-store" in response["Cache-Control"]
    assert "rw_" not in response["Location"] if response.has_header("Location") else True
    later = html_of(browser, ADDRESS)
    assert secret not in later and secret[:9] in later
    assert "oxidation" in text_of(later)


def test_the_secret_is_nowhere_in_the_session_or_the_cookies(browser: Client, study: Study) -> None:
    response = browser.post(ADDRESS, sent())
    secret = secret_in(response.content.decode())
    assert all(secret not in morsel.value for morsel in browser.cookies.values())
    assert all(secret not in str(session.get_decoded()) for session in Session.objects.all())
    assert not AccessToken.objects.filter(digest__contains=secret[3:]).exists()


def test_sending_the_form_again_makes_no_second_token(browser: Client, study: Study) -> None:
    browser.post(ADDRESS, sent())
    response = browser.post(ADDRESS, sent())
    assert response.status_code == 422
    assert "You have a token 'script' already" in text_of(response.content.decode())
    assert AccessToken.objects.count() == 1


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"name": ""}, "A token needs a name"),
        ({"name": "x" * 10**6}, "are too many"),
        ({"name": "a\x00b"}, "Null characters are not allowed"),
        ({"scope": "everything"}, "'everything' is not a scope"),
        ({"scope": ""}, "'' is not a scope"),
        ({"project": "no-such"}, "There is no project 'no-such' that you may see"),
        ({"project": "secret-study"}, "There is no project 'secret-study' that you may see"),
        ({"expires": ""}, "A token needs a last day"),
        ({"expires": "31.12.2026"}, "'31.12.2026' is no date"),
        ({"expires": "<b>soon</b>"}, "is no date"),
        ({"expires": "1e400"}, "'1e400' is no date"),
        ({"expires": "9" * 10**6}, "is no date"),
        ({"expires": "0001-01-01"}, "a time to come, at most 366 days"),
        ({"expires": "9999-12-31"}, "a time to come, at most 366 days"),
        ({"expires": day(-1)}, "a time to come, at most 366 days"),
        ({"expires": day(400)}, "a time to come, at most 366 days"),
    ],
)
def test_a_token_that_cannot_be_made_comes_back_with_its_problem(
    browser: Client, study: Study, changes: dict[str, str], said: str
) -> None:
    make_project(slug="secret-study")
    response = browser.post(ADDRESS, sent(**changes))
    html = response.content.decode()
    assert response.status_code == 422
    assert said in text_of(html)
    assert "<b>soon" not in html
    if "name" not in changes:
        assert 'value="script"' in html
    assert not AccessToken.objects.exists()


def test_dates_far_away_are_refused_in_any_zone(browser: Client, study: Study) -> None:
    for zone in ("Pacific/Kiritimati", "Pacific/Niue"):
        type(study.user).objects.filter(pk=study.user.pk).update(time_zone=zone)
        for expires in ("0001-01-01", "9999-12-31"):
            assert browser.post(ADDRESS, sent(expires=expires)).status_code == 422


def test_a_token_is_withdrawn_at_once(browser: Client, study: Study) -> None:
    secret = secret_in(browser.post(ADDRESS, sent()).content.decode())
    token = token_of_secret(secret)
    assert token is not None
    where = f"{ADDRESS}{token.pk}/withdraw/"
    assert browser.get(where).status_code == 405
    assert browser.post(where)["Location"] == ADDRESS
    token.refresh_from_db()
    assert token.withdrawn is not None
    text = text_of(html_of(browser, ADDRESS))
    assert "The token 'script' is withdrawn" in text
    assert browser.post(where).status_code == 409


def test_nobody_withdraws_or_sees_a_token_of_somebody_else(browser: Client, study: Study) -> None:
    otto = make_user("otto")
    token, _ = issue_access_token(
        user=otto, name="of Otto", scope="read", expires=timezone.now() + timedelta(days=1)
    )
    assert "of Otto" not in html_of(browser, ADDRESS)
    assert browser.post(f"{ADDRESS}{token.pk}/withdraw/").status_code == 404
    token.refresh_from_db()
    assert token.withdrawn is None


def test_old_tokens_are_listed_with_their_state(browser: Client, study: Study) -> None:
    token, _ = issue_access_token(
        user=study.user, name="old <one>", scope="read", expires=timezone.now() + timedelta(days=1)
    )
    past = timezone.now() - timedelta(days=3)
    AccessToken.objects.filter(pk=token.pk).update(created=past - timedelta(days=1), expires=past)
    html = html_of(browser, ADDRESS)
    assert "old &lt;one&gt;" in html
    assert "expired" in text_of(html) and "Withdraw" not in html


def test_strangers_are_sent_to_the_login(client: Client, db: None) -> None:
    assert client.get(ADDRESS)["Location"] == f"/login/?next={ADDRESS}"
    refused = client.post(ADDRESS, sent())
    assert refused.status_code == 403 and "You are logged out" in refused.content.decode()
    assert client.post(f"{ADDRESS}1/withdraw/").status_code == 302


def test_the_number_of_queries_does_not_grow_with_the_tokens(browser: Client, study: Study) -> None:
    for i in range(8):
        browser.post(ADDRESS, sent(name=f"script {i}"))
    with CaptureQueriesContext(connection) as queries:
        html_of(browser, ADDRESS)
    assert len(queries) <= 5
