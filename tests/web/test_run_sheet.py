"""The page of one run."""

from __future__ import annotations

import re
from dataclasses import replace
from html import unescape

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.materials.services import Portion, enter_lot, make_up_stock
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import entry_of, latest_revision
from kinetics_db.runs.services import log_run, revise_run, seal_run
from tests.factories.people import make_member, make_user
from tests.web.study import RIGHT, Study

MOST_QUERIES = 20


def text_of(html: str) -> str:
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", html)).split())


def html_of(browser: Client, run: Run, **asked: str) -> str:
    response = browser.get(f"/runs/{run.pk}/", asked)
    assert response.status_code == 200
    return response.content.decode()


@pytest.fixture
def weighed(study: Study) -> Run:
    """A run of a lot and a stock, in 10 mL, with sections and notes."""
    where = {"user": study.user, "project_id": study.project.pk}
    study.run("K00")
    enter_lot(**where, code="K-7", compound="alcohol", purity=0.98, purity_uncertainty=0.005)
    make_up_stock(
        **where, code="S1", portions=[Portion(1.0, "mmol", compound="alcohol")], volume=(10.0, "mL")
    )
    entry = RunEntry(
        code="K01",
        charges=[
            ChargeEntry(Amount(10.0, "mg", 0.1), lot="K-7", note="<first>"),
            ChargeEntry(Amount(500.0, "uL"), stock="S1"),
        ],
        total_volume=Amount(10.0, "mL", 0.02),
        temperature=Amount(40.0, "degC", 0.2),
        replicate_of="K00",
        notes="stirred <fast>\nthen slowly",
        sections={"vessel": {"name": "flask 3"}, "clock": {"first contact": Amount(5.0, "s")}},
    )
    return log_run(**where, entry=entry).run


def test_the_sheet_shows_charges_as_weighed_with_what_they_bring_in(browser: Client, weighed: Run) -> None:
    html = html_of(browser, weighed)
    text = text_of(html)
    assert "1 K-7 lot, r1 10.00(10) mg alcohol 98 µmol 9.8 mmol/L <first>" in text
    assert "2 S1 stock, r1 500 µL" in text or "2 S1 stock, r1 500 uL" in text
    assert "[alcohol] 0 14.80(11) mmol/L" in text
    assert "temperature 40.00(20) °C" in text
    assert "total volume 10.000(20) mL" in text
    assert "replicate of K00" in text
    assert "vessel, name flask 3" in text
    assert "clock, first contact 5 s" in text
    assert "stirred <fast> then slowly" in text
    assert "This run waits for its instrument file" in text
    assert "<fast>" not in html
    assert "style=" not in html


def test_a_measured_run_has_its_tables_drawn_with_links(browser: Client, study: Study) -> None:
    run = study.run("K01")
    table = run.concentration_tables.get()
    html = html_of(browser, run)
    assert html.count('<figure class="chart"') == 1
    assert f'data-csv="/tables/{table.pk}.csv"' in html
    assert f'href="/tables/{table.pk}/"' in html
    assert re.search(r'href="/files/\d+/">nmr.txt', html)
    assert "waits" not in text_of(html)


def test_only_tables_that_nothing_supersedes_are_drawn(browser: Client, study: Study) -> None:
    from kinetics_db.measurements.services import supersede_table

    run = study.run("K01")
    older = run.concentration_tables.get()
    newer = study.table(run, name="again.txt", k=3e-3)
    supersede_table(user=study.user, older=older, newer=newer, reason="phase corrected")
    html = html_of(browser, run)
    assert html.count('<figure class="chart"') == 1
    assert f'data-csv="/tables/{newer.pk}.csv"' in html
    assert "superseded by table 2" in text_of(html)


def test_the_sheet_says_which_models_explain_the_run(browser: Client, fitted: Study) -> None:
    run = Run.objects.get(code="K01")
    third = fitted.version("never", "alcohol --k_3--> ketone + alcohol\n")
    text = text_of(html_of(browser, run))
    assert re.search(r"first order v1 (agrees|consistent)", text)
    assert "second order v1 disagrees" in text
    assert "Never tried on this run: never v1" in text
    html = html_of(browser, run)
    assert f'href="/versions/{third.pk}/"' in html
    assert re.search(rf'href="/fits/\d+/#run-{run.pk}"', html)
    assert "NRMSE" in text


def test_verdicts_on_older_data_are_stale(browser: Client, fitted: Study) -> None:
    run = Run.objects.get(code="K01")
    entry = replace(entry_of(latest_revision(run)), notes="changed")
    revise_run(user=fitted.user, run=run, entry=entry, based_on=1)
    text = text_of(html_of(browser, run))
    assert "stale the run has been revised (r1 used, r2 is newest)" in text


def test_a_second_fit_of_the_same_model_replaces_the_verdict_of_the_first(
    browser: Client, fitted: Study
) -> None:
    dataset = fitted.dataset()
    fitted.fit("first order", RIGHT, dataset, start=2e-3)
    text = text_of(html_of(browser, Run.objects.get(code="K01")))
    assert text.count("first order v1") == 1
    assert "1 earlier verdict of the same models on the same data is kept and not shown" in text


def test_an_older_revision_is_shown_as_it_was_and_marked(browser: Client, study: Study, weighed: Run) -> None:
    changed = replace(entry_of(latest_revision(weighed)), temperature=Amount(50.0, "degC", 0.2))
    revise_run(user=study.user, run=weighed, entry=changed, based_on=1, reason="thermometer <corrected>")
    older = html_of(browser, weighed, r="1")
    text = text_of(older)
    assert "This is revision 1, not the newest" in text
    assert "temperature: 40 ± 0.2 degC → 50 ± 0.2 degC" in text
    assert "temperature 40.00(20) °C" in text
    assert "revise/" not in older
    newest = text_of(html_of(browser, weighed))
    assert "temperature 50.00(20) °C" in newest
    assert "not the newest" not in newest
    assert "because: thermometer <corrected>" in newest
    assert re.search(rf'href="/runs/{weighed.pk}/\?r=1">r1</a>', html_of(browser, weighed))


@pytest.mark.parametrize("number", ["0", "7", "x", "-1", "9" * 40, "\x00"])
def test_a_revision_that_is_not_there_is_not_found(browser: Client, weighed: Run, number: str) -> None:
    assert browser.get(f"/runs/{weighed.pk}/", {"r": number}).status_code == 404


def test_a_run_is_sealed_by_post_only_and_once(browser: Client, study: Study, weighed: Run) -> None:
    address = f"/runs/{weighed.pk}/seal/"
    assert browser.get(address).status_code == 405
    response = browser.post(address, follow=True)
    assert "Run K01 is sealed" in text_of(response.content.decode())
    assert Run.objects.get(pk=weighed.pk).sealed is not None
    again = browser.post(address)
    assert again.status_code == 409
    assert "sealed already" in text_of(again.content.decode())
    assert "<summary>Seal</summary>" not in html_of(browser, weighed)


def test_a_reader_sees_no_button_and_may_not_seal(client: Client, study: Study, weighed: Run) -> None:
    client.force_login(make_member(study.project, "reader"))
    html = html_of(client, weighed)
    for part in ("/revise/", "/seal/", "/files/new/", "?copy="):
        assert part not in html
    assert client.post(f"/runs/{weighed.pk}/seal/").status_code == 403


def test_strangers_and_the_anonymous_see_no_run(client: Client, weighed: Run) -> None:
    assert client.get(f"/runs/{weighed.pk}/")["Location"].startswith("/login/")
    client.force_login(make_user("stranger"))
    assert client.get(f"/runs/{weighed.pk}/").status_code == 404
    assert client.post(f"/runs/{weighed.pk}/seal/").status_code == 404
    assert client.get("/runs/999999999/").status_code == 404
    assert client.get("/runs/99999999999999999999999999/").status_code == 404


def test_the_page_costs_the_same_however_much_there_is(browser: Client, fitted: Study) -> None:
    run = Run.objects.get(code="K01")
    html_of(browser, run)
    with CaptureQueriesContext(connection) as few:
        html_of(browser, run)
    for i in range(3):
        fitted.table(run, name=f"n{i}.txt")
        entry = replace(entry_of(latest_revision(run)), notes=f"n{i}")
        revise_run(user=fitted.user, run=run, entry=entry, based_on=i + 1)
    seal_run(user=fitted.user, run=run)
    with CaptureQueriesContext(connection) as many:
        html_of(browser, run)
    assert len(many) <= len(few)
    assert len(many) <= MOST_QUERIES


def test_the_start_of_a_run_is_shown_in_the_readers_zone(browser: Client, study: Study) -> None:
    run = study.run("K01", started="2026-03-09T13:00:00+01:00")
    assert "started 2026-03-09 12:00 UTC" in text_of(html_of(browser, run))
