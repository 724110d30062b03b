"""The page of a project at a glance."""

from __future__ import annotations

import itertools
import re
from zoneinfo import ZoneInfo

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.evidence.models import RunEvidence
from kinetics_db.evidence.selectors import grid_of
from kinetics_db.fits.models import Fit
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import Claim, claim_job, fail_job, heartbeat
from kinetics_db.materials.services import enter_compound
from kinetics_db.measurements.services import store_file, supersede_table
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import compute_now, lines, make_reported_table, make_run
from tests.factories.people import make_member, make_user
from tests.web.reading import html_of as page_at
from tests.web.reading import margins_of, text_of
from tests.web.study import RIGHT, WRONG, Study

ADDRESS = "/projects/oxidation/"
MOST_QUERIES = 16


def html_of(browser: Client, address: str = ADDRESS) -> str:
    return page_at(browser, address)


def claimed(fit: Fit) -> Claim:
    """The fit's job, as a worker that has just taken it up holds it."""
    claim = claim_job(job_for(kind="fit", subject_id=fit.pk).pk)
    assert claim is not None
    return claim


def section_of(html: str, heading: str) -> str:
    """The section under a heading with that id."""
    (found,) = re.findall(
        rf'<section class="leaf"[^>]*aria-labelledby="{heading}".*?</section>', html, re.DOTALL
    )
    return str(found)


def test_the_newest_runs_show_their_conditions_and_a_small_curve(browser: Client, fitted: Study) -> None:
    html = section_of(html_of(browser), "runs")
    text = text_of(html)
    assert "T / °C [alcohol] 0 mmol/L" in text
    assert "K01 Run K01: alcohol, ketone over time 25.00(20) 100.0(1.0)" in text
    assert "K02 control: blank Run K02: alcohol, ketone over time 35.00(20) 100.0(1.0)" in text
    assert html.count("<svg") == 2
    assert f'href="/runs/{Run.objects.get(code="K01").pk}/"' in html


def test_only_the_newest_runs_are_listed_the_newest_first(browser: Client, study: Study) -> None:
    for i in range(10):
        make_run(study.user, study.project.pk, f"Q{i}", {"alcohol": Amount(0.1, "mol/L")})
    codes = re.findall(r">(Q\d)</a>", section_of(html_of(browser), "runs"))
    assert codes == [f"Q{i}" for i in range(9, 1, -1)]


def test_each_model_version_is_one_line_with_its_verdicts_and_how_far_behind_it_is(
    browser: Client, fitted: Study
) -> None:
    grid = grid_of(user=fitted.user, project_id=fitted.project.pk)
    html = section_of(html_of(browser), "evidence")
    lines_of = re.findall(r"<tr><th scope=\"row\">(.*?)</tr>", html, re.DOTALL)
    texts = [text_of(line) for line in lines_of]
    best = min(grid.columns, key=lambda column: column.delta_aicc or 0.0)
    assert len(texts) == 2
    assert texts[0].startswith(f"{best.mechanism} all v1 in fit {best.fit_id} 0.0 ")
    for column in grid.columns:
        (line,) = (text for text in texts if text.startswith(column.mechanism))
        verdicts = [cell.verdict for (_, fit_id), cell in grid.cells.items() if fit_id == column.fit_id]
        for verdict in set(verdicts):
            assert f"{verdict} {verdicts.count(verdict)}" in line
        assert f'href="/fits/{column.fit_id}/"' in html
    assert 'class="count v-agrees"' in html and 'class="count v-disagrees"' in html


def test_only_the_newest_versions_are_summed_up_and_the_others_counted(browser: Client, study: Study) -> None:
    study.run("K01")
    dataset = study.dataset()
    for i in range(8):
        study.fit(f"model {i}", RIGHT, dataset)
    text = text_of(section_of(html_of(browser), "evidence"))
    assert "model 7 v1" in text and "model 1 v1" not in text
    assert "2 older versions are not shown here" in text


def test_the_margin_says_who_made_the_project_and_leads_to_its_parts(browser: Client, study: Study) -> None:
    html = html_of(browser)
    assert "made by mira" in margins_of(html) and "your role: owner" in margins_of(html)
    for part in ("runs", "materials", "mechanisms", "datasets", "fits", "evidence", "members"):
        assert f'href="/projects/oxidation/{part}/"' in html


def test_results_on_older_data_are_marked_stale(browser: Client, fitted: Study) -> None:
    assert '<td><a href="/datasets/' in html_of(browser)
    assert html_of(browser).count('<strong class="stale">stale</strong></td>') == 0
    run = Run.objects.get(code="K01")
    newer = fitted.table(run, k=2.1e-3, name="nmr-again.txt")
    supersede_table(
        user=fitted.user, older=run.concentration_tables.earliest("pk"), newer=newer, reason="phase was wrong"
    )
    html = html_of(browser)
    assert section_of(html, "evidence").count('<strong class="stale">stale</strong></td>') == 2
    assert section_of(html, "fits").count('<strong class="stale">stale</strong></td>') == 2
    assert "2 fits finished , 2 stale" in text_of(html_of(browser, "/"))


def test_a_fit_under_way_shows_its_progress_and_the_page_follows_it(browser: Client, study: Study) -> None:
    study.run("K01")
    fit = study.fit("first order", RIGHT, study.dataset(), compute=False)
    html = html_of(browser)
    assert f'hx-get="/projects/oxidation/under-way/?open={fit.pk}" hx-trigger="every 2s"' in html
    assert '<noscript><meta http-equiv="refresh" content="5"></noscript>' in html
    assert "waiting" in text_of(section_of(html, "under-way"))
    heartbeat(claimed(fit), progress=0.4375, message="iteration 6, cost 12.5")
    for address in (ADDRESS, f"{ADDRESS}under-way/?open={fit.pk}"):
        html = html_of(browser, address)
        assert 'value="0.438"' in html or 'value="0.437"' in html
        assert "running: iteration 6, cost 12.5" in text_of(html)
        assert f"fit {fit.pk}, asked for by mira" in margins_of(html)
    assert "<html" not in html, "only the part that changes is sent"


def test_the_page_is_loaded_anew_when_a_fit_ends_or_another_begins(browser: Client, study: Study) -> None:
    study.run("K01")
    dataset = study.dataset()
    first = study.fit("first order", RIGHT, dataset, compute=False)
    follows = f"{ADDRESS}under-way/?open={first.pk}"
    assert not browser.get(follows).has_header("HX-Refresh")
    second = study.fit("second order", WRONG, dataset, start=1e-2, compute=False)
    assert browser.get(follows)["HX-Refresh"] == "true"
    both = f"{ADDRESS}under-way/?open={second.pk}-{first.pk}"
    assert not browser.get(both).has_header("HX-Refresh")
    compute_now(second)
    assert browser.get(both)["HX-Refresh"] == "true"
    assert browser.get(f"{ADDRESS}under-way/?open=<b>")["HX-Refresh"] == "true"


def test_the_page_can_be_held_still(browser: Client, study: Study) -> None:
    study.run("K01")
    study.fit("first order", RIGHT, study.dataset(), compute=False)
    html = html_of(browser, f"{ADDRESS}?hold")
    assert "http-equiv" not in html and "hx-get" not in html
    assert "held still" in html


def test_a_page_without_work_under_way_stays_as_it_is(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    assert "http-equiv" not in html and "hx-get" not in html


def test_a_fit_that_failed_says_why(browser: Client, study: Study) -> None:
    study.run("K01")
    fit = study.fit("first order", RIGHT, study.dataset(), compute=False)
    fail_job(claimed(fit), reason="the disk is <full>")
    html = section_of(html_of(browser), "fits")
    assert "failed" in text_of(html)
    assert "the disk is &lt;full&gt;" in html


def test_percentages_stay_percentages(browser: Client, study: Study) -> None:
    run = make_run(study.user, study.project.pk, "R1", {"ester": Amount(100.0, "%")})
    text = lines(("time / min", "ester / %"), (0, 100.0), (10, 60.5), (20, 36.1))
    make_reported_table(study.user, run, text, {"ester": "ester"}, constant_u=1.0)
    assert "100 %" in text_of(section_of(html_of(browser), "runs"))


def test_a_project_of_invented_data_says_so(browser: Client, study: Study) -> None:
    assert "invented" not in html_of(browser)
    type(study.project).objects.filter(pk=study.project.pk).update(invented=True)
    assert "The data of this project are invented" in html_of(browser)
    assert "Invented data" in html_of(browser, "/")


def next_step(browser: Client) -> str:
    """The one step that an unfinished project asks for."""
    (step,) = re.findall(
        r'<li aria-current="step"><a class="first" href="[^"]+">(.*?)</a></li>', html_of(browser)
    )
    return str(step)


def test_an_empty_project_leads_to_its_first_fit_step_by_step(browser: Client, study: Study) -> None:
    assert "No run yet." in text_of(html_of(browser))
    assert next_step(browser).startswith("Enter the compounds")
    enter_compound(user=study.user, project_id=study.project.pk, name="alcohol", molar_mass=100.0)
    assert next_step(browser) == "Log a run with its charges"
    warm = Amount(25, "degC")
    run = make_run(study.user, study.project.pk, "K09", {"alcohol": Amount(0.1, "mol/L")}, temperature=warm)
    assert next_step(browser) == "Give the run its instrument file"
    assert f'href="/runs/{run.pk}/files/new/"' in html_of(browser)
    data = lines(("time / s", "H1"), (0, 1), (1, 2)).encode()
    store_file(user=study.user, run=run, name="a.csv", data=data)
    assert next_step(browser) == "Reduce its signals to concentrations"
    study.table(run)
    assert next_step(browser) == "Write a mechanism"
    study.version("first order", RIGHT)
    assert next_step(browser) == "Freeze concentration tables into a dataset"
    dataset = study.dataset()
    assert next_step(browser) == "Ask for a fit of the mechanism to the dataset"
    assert text_of(html_of(browser)).count(" done") == 6
    study.fit("first order", RIGHT, dataset)
    html = html_of(browser)
    assert "What to do first" not in html and "Log a run</a>" in html


def test_runs_that_wait_are_counted_and_the_newest_named(browser: Client, study: Study) -> None:
    study.run("K01")
    for i in range(7):
        make_run(study.user, study.project.pk, f"Q{i}", {"alcohol": Amount(0.1, "mol/L")})
    filed = make_run(study.user, study.project.pk, "R1", {"alcohol": Amount(0.1, "mol/L")})
    data = lines(("time / s", "H1"), (0, 1), (1, 2)).encode()
    store_file(user=study.user, run=filed, name="a.csv", data=data)
    html = section_of(html_of(browser), "waiting")
    text = text_of(html)
    assert "7 for their instrument files, 1 for its reduction to concentrations" in text
    assert re.findall(r">([QRK]\d+)</a>", html) == ["R1", "Q6", "Q5", "Q4", "Q3"]
    assert "All runs that wait (3 more)" in text
    assert page_at(browser, "/projects/oxidation/runs/?q=no+table").count("/copy") == 0
    assert "K01" not in page_at(browser, "/projects/oxidation/runs/?q=no+table").split("<tbody>")[1]


def test_a_reader_sees_the_project_and_no_buttons_for_writers(client: Client, fitted: Study) -> None:
    make_run(fitted.user, fitted.project.pk, "K09", {"alcohol": Amount(0.1, "mol/L")})
    client.force_login(make_member(fitted.project, "reader", "rhea"))
    html = html_of(client)
    assert "your role: reader" in text_of(html)
    assert "/new/" not in html


def test_a_reader_of_an_empty_project_is_asked_for_nothing(client: Client, study: Study) -> None:
    client.force_login(make_member(study.project, "reader", "rhea"))
    html = html_of(client)
    assert "Contributors of the project do this" in html and "/new/" not in html


def test_markup_typed_by_people_stays_text(browser: Client, study: Study) -> None:
    study.run("<b>K&1</b>", notes="<script>alert(1)</script>")
    study.fit("<i>path</i>", RIGHT, study.dataset("<u>S</u>"))
    type(study.project).objects.filter(pk=study.project.pk).update(name="<em>N</em>", description="<p onx=1>")
    html = html_of(browser)
    assert "<i>path" not in html and "<u>S" not in html and "<b>K" not in html and "<em>N" not in html
    assert "<p onx" not in html and "alert(1)" not in html
    assert "&lt;b&gt;K&amp;1&lt;/b&gt;" in html


@pytest.mark.parametrize("address", [ADDRESS, "/", f"{ADDRESS}evidence/", f"{ADDRESS}members/", "/account/"])
def test_pages_keep_to_their_own_content_policy(browser: Client, fitted: Study, address: str) -> None:
    html = html_of(browser, address)
    assert not re.search(r"<style|\sstyle=|\son[a-z]+=|javascript:|\shx-on", html)
    assert all('src="/static/' in tag for tag in re.findall(r"<script[^>]*>", html))
    assert "hx-vals='js:" not in html
    assert not re.search(r'(?:src|href|action|hx-get|hx-post)="(?:https?:)?//', html)


@pytest.mark.parametrize(
    "address", [ADDRESS, "/", f"{ADDRESS}evidence/", f"{ADDRESS}members/", "/account/", "/account/tokens/"]
)
def test_ids_are_unique_and_labels_and_links_on_the_page_lead_somewhere(
    browser: Client, fitted: Study, address: str
) -> None:
    html = html_of(browser, address)
    ids = re.findall(r'\sid="([^"]+)"', html)
    assert len(ids) == len(set(ids))
    assert set(re.findall(r'href="#([^"]+)"', html)) <= set(ids)
    assert set(re.findall(r'<label[^>]* for="([^"]+)"', html)) <= set(ids)
    for named in re.findall(r'aria-(?:labelledby|describedby)="([^"]+)"', html):
        assert set(named.split()) <= set(ids)
    levels = [int(level) for level in re.findall(r"<h([1-6])", html)]
    assert levels[0] == 1 and levels.count(1) == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))


def test_the_number_of_queries_does_not_grow_with_the_runs(browser: Client, study: Study) -> None:
    counts = []
    for codes in (("K01", "K02"), ("K03", "K04", "K05", "K06")):
        for code in codes:
            study.run(code)
        dataset = study.dataset()
        study.fit("first order", RIGHT, dataset)
        study.fit("second order", WRONG, dataset, start=1e-2)
        with CaptureQueriesContext(connection) as queries:
            html_of(browser)
        counts.append(len(queries))
    assert counts[0] == counts[1] <= MOST_QUERIES, "\n".join(q["sql"][:200] for q in queries)


def test_an_empty_project_costs_no_more_queries(browser: Client, study: Study) -> None:
    with CaptureQueriesContext(connection) as queries:
        html_of(browser)
    assert len(queries) <= MOST_QUERIES, "\n".join(q["sql"][:200] for q in queries)


def test_strangers_are_told_nothing_not_even_that_the_project_exists(client: Client, fitted: Study) -> None:
    client.force_login(make_user("stranger"))
    for part in ("", "under-way/", "evidence/", "evidence.csv"):
        there, nowhere = client.get(f"{ADDRESS}{part}"), client.get(f"/projects/no-such-thing/{part}")
        assert there.status_code == nowhere.status_code == 404
        assert there.content.decode().replace("oxidation", "X") == nowhere.content.decode().replace(
            "no-such-thing", "X"
        )


def test_a_poll_of_somebody_logged_out_leads_to_the_login(client: Client, study: Study) -> None:
    response = client.get(f"{ADDRESS}under-way/?open=1", headers={"HX-Request": "true"})
    assert response["HX-Redirect"].startswith("/login/")


def test_dates_are_shown_in_the_readers_zone(browser: Client, study: Study) -> None:
    type(study.user).objects.filter(pk=study.user.pk).update(time_zone="Asia/Kolkata")
    there = study.project.created.astimezone(ZoneInfo("Asia/Kolkata"))
    assert f">{there:%Y-%m-%d %H:%M} IST</time>" in html_of(browser)
    type(study.user).objects.filter(pk=study.user.pk).update(time_zone="Nowhere/Else")
    assert " UTC</time>" in html_of(browser)


def test_a_verdict_that_says_nothing_is_counted_as_well(browser: Client, fitted: Study) -> None:
    RunEvidence.objects.update(verdict="not tested")
    assert text_of(section_of(html_of(browser), "evidence")).count("not tested 2") == 2
