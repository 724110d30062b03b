"""A session that ends while somebody works: nothing that was typed is lost."""

from __future__ import annotations

from html import unescape

import pytest
from django.test import Client

from kinetics_db.materials.services import enter_compound
from kinetics_db.runs.models import Run
from tests.web.forms_sent import sent_by
from tests.web.hostile import MARKUP, RAW_MARKUP
from tests.web.page_forms import forms_of
from tests.web.study import Study

NEW = "/projects/oxidation/runs/new/"
LIVE = {"HX-Request": "true"}


def typed(study: Study, browser: Client) -> dict[str, object]:
    enter_compound(user=study.user, project_id=study.project.pk, name="alcohol", molar_mass=100.0)
    return sent_by(
        browser.get(NEW),
        code="K77",
        notes=f"\nfirst line\n{MARKUP}",
        **{"charges-1-source": "alcohol", "charges-1-amount": "10", "charges-1-unit": "mmol/L"},
    )


def test_a_form_sent_without_a_session_comes_back_and_can_be_sent_again(
    study: Study, browser: Client
) -> None:
    fields = typed(study, browser)
    browser.logout()
    response = browser.post(NEW, fields)
    assert response.status_code == 403
    html = response.content.decode()
    assert "You are logged out" in html and not any(raw in html for raw in RAW_MARKUP)
    assert not Run.objects.exists()
    (form,) = forms_of(html, NEW)
    assert form.action == NEW
    browser.force_login(study.user)
    again = {name: value.decode() for name, value in form.as_it_stands()}
    assert browser.post(NEW, again).status_code == 302
    run = Run.objects.get(code="K77")
    assert run.revisions.get().content["notes"] == f"first line\n{MARKUP}"


def test_the_query_of_a_form_without_a_session_stays(study: Study, browser: Client) -> None:
    browser.logout()
    response = browser.post(f"{NEW}?copy=1", {"code": "K78"})
    assert f'action="{NEW}?copy=1"' in unescape(response.content.decode())


def test_a_live_part_says_in_place_that_the_session_has_ended(study: Study, browser: Client) -> None:
    fields = typed(study, browser)
    browser.logout()
    response = browser.post("/projects/oxidation/runs/amounts/", fields, headers=LIVE)
    assert response.status_code == 403 and "HX-Redirect" not in response
    assert "What you typed is still here" in response.content.decode()


def test_a_poll_without_a_session_leads_to_the_login_and_from_there_to_its_page(
    study: Study, client: Client
) -> None:
    headers = {**LIVE, "HX-Current-URL": "http://testserver/projects/oxidation/"}
    response = client.get("/projects/oxidation/under-way/?open=1", headers=headers)
    assert response["HX-Redirect"] == "/login/?next=/projects/oxidation/"
    elsewhere = {**LIVE, "HX-Current-URL": "http://elsewhere.example/x"}
    response = client.get("/projects/oxidation/under-way/", headers=elsewhere)
    assert response["HX-Redirect"] == "/login/?next=/projects/oxidation/under-way/"


def test_passwords_do_not_come_back(study: Study, client: Client) -> None:
    secrets = {"current": "secret-one", "password": "secret-two", "again": "secret-two", "change": "password"}
    response = client.post("/account/", secrets)
    assert response.status_code == 403
    assert "secret" not in response.content.decode()


@pytest.mark.parametrize("address", ["/runs/1/seal/", "/projects/oxidation/runs/new/"])
def test_where_nothing_was_typed_the_login_comes_at_once(study: Study, client: Client, address: str) -> None:
    response = client.post(address)
    assert response.status_code == 302 and response["Location"].startswith("/login/")
