"""The page of a project."""

from __future__ import annotations

import re
from html import unescape
from zoneinfo import ZoneInfo

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.engine.shown_numbers import interval, percent, probability, with_uncertainty
from kinetics_db.evidence.models import RunEvidence
from kinetics_db.evidence.selectors import evidence_of, grid_of
from kinetics_db.fits.models import Fit
from kinetics_db.fits.selectors import result_of
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import Claim, claim_job, fail_job, heartbeat
from kinetics_db.web.words import message_text
from tests.factories.people import make_member, make_user
from tests.web.study import RIGHT, WRONG, Study

ADDRESS = "/projects/oxidation/"
MOST_QUERIES = 16


def html_of(browser: Client, address: str = ADDRESS) -> str:
    response = browser.get(address)
    assert response.status_code == 200
    return response.content.decode()


def claimed(fit: Fit) -> Claim:
    """The fit's job, as a worker that has just taken it up holds it."""
    claim = claim_job(job_for(kind="fit", subject_id=fit.pk).pk)
    assert claim is not None
    return claim


def text_of(html: str) -> str:
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", html)).split())


def test_a_run_shows_its_conditions_with_uncertainty_and_unit(browser: Client, fitted: Study) -> None:
    text = text_of(html_of(browser))
    assert "K01" in text
    assert "25.00(20) °C" in text
    assert "35.00(20) °C" in text
    assert "[alcohol] 0 100.0(1.0) mmol/L" in text
    assert "control: blank" in text


def test_each_run_has_a_plot_with_its_points_and_the_better_models_curve(
    browser: Client, fitted: Study
) -> None:
    html = html_of(browser)
    assert html.count("<svg") == 2
    assert html.count('class="mark"') == 2 * (2 + 2)  # alcohol and ketone, as points and in the key
    assert html.count('class="curve"') == 2 * 2
    assert "Lines join the values of first order v1" in text_of(html)


def test_another_models_curve_can_be_asked_for(browser: Client, fitted: Study) -> None:
    wrong = Fit.objects.get(mechanism_version__mechanism__name="second order")
    html = html_of(browser, f"{ADDRESS}?curve={wrong.pk}")
    assert "Lines join the values of second order v1" in text_of(html)
    default = html_of(browser)
    assert re.findall(r'class="curve" d="([^"]+)', html) != re.findall(r'class="curve" d="([^"]+)', default)


@pytest.mark.parametrize("asked", ["none", "999999", "x"])
def test_no_curve_is_drawn_where_no_such_fit_is(browser: Client, fitted: Study, asked: str) -> None:
    assert 'class="curve"' not in html_of(browser, f"{ADDRESS}?curve={asked}")


def test_constants_stand_with_their_intervals_by_temperature(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    text = text_of(html)
    fit = Fit.objects.get(mechanism_version__mechanism__name="first order")
    result = result_of(fit)
    assert result is not None
    constants = result.constants.all()
    assert {c.where for c in constants} == {"298.15 K", "308.15 K"}
    celsius = {"298.15 K": "25 °C", "308.15 K": "35 °C"}  # as at the runs; K to point at and to copy
    for c in constants:
        value, limits = with_uncertainty(c.value, c.standard_error, "1/s"), interval(c.low, c.high, "1/s")
        assert f"k ox {celsius[c.where]} {value} {limits}" in text
    assert text.index("k ox 25 °C") < text.index("k ox 35 °C")
    assert '<data value="298.15" title="298.15 K">25 °C</data>' in html
    assert "95 % interval" in text


def test_the_grid_shows_the_verdict_of_every_cell_with_p_and_error_of_one_observable(
    browser: Client, fitted: Study
) -> None:
    html = html_of(browser)
    grid = grid_of(user=fitted.user, project_id=fitted.project.pk)
    assert len(grid.cells) == 4
    verdicts = {key: cell.verdict for key, cell in grid.cells.items()}
    assert "disagrees" in verdicts.values() and "agrees" in verdicts.values()
    rows = re.findall(r'<tr><th scope="row"><a href="#run-\d+">(K\d+)</a>(.*?)</tr>', html, re.DOTALL)
    for code, cells in rows:
        shown = re.findall(r"<b>(\w[\w ]+)</b>", cells)
        assert shown == [verdicts[code, column.fit_id] for column in grid.columns]
        for column, cell in zip(grid.columns, cells.split("</td>")[1:], strict=False):
            evidence = evidence_of(user=fitted.user, fit_id=column.fit_id)
            (run,) = (r for r in evidence.content["runs"] if r["experiment"] == code)
            (one,) = (o for o in run["observables"] if o["observable"] == run["worst_observable"])
            p = min(one["chi_square_p_adjusted"], one["runs_p_adjusted"])
            expected = f"{one['observable']}: p {probability(p)}, NRMSE {percent(one['nrmse'])}"
            assert expected in text_of(cell)
    assert len(rows) == 2
    deltas = [c.delta_aicc for c in grid.columns if c.delta_aicc is not None]
    assert len(deltas) == 2
    assert min(deltas) == 0.0
    assert f"{max(deltas):,.1f}".replace(",", "\N{NARROW NO-BREAK SPACE}") in html


def test_a_strain_by_a_pull_names_what_was_pulled_and_how_far(browser: Client, fitted: Study) -> None:
    fit = Fit.objects.get(mechanism_version__mechanism__name="first order")
    rows = RunEvidence.objects.filter(evidence__result__fit=fit)
    pulled = {"verdict": "strained", "observable": "alcohol", "pull": 10.06, "pull_name": "run K01: charge 1"}
    assert "charge 1 pulled" not in text_of(html_of(browser))
    rows.filter(run_revision__run__code="K01").update(**pulled)
    rows.filter(run_revision__run__code="K02").update(**pulled | {"pull": -3.3, "pull_name": "lot L purity"})
    text = text_of(html_of(browser))
    assert "strained charge 1 pulled +10.1 u alcohol: p " in text
    assert "strained lot L purity pulled −3.3 u alcohol: p " in text
    rows.update(verdict="disagrees")  # what a test decided is not put down to a pull
    assert "charge 1 pulled" not in text_of(html_of(browser))


def test_a_pull_within_the_projects_own_threshold_is_not_shown(browser: Client, fitted: Study) -> None:
    RunEvidence.objects.update(verdict="strained", pull=4.0, pull_name="run K01: charge 1")
    assert "charge 1 pulled +4 u" in text_of(html_of(browser))
    type(fitted.project).objects.filter(pk=fitted.project.pk).update(verdict_thresholds={"pull": 4.5})
    assert "charge 1 pulled" not in text_of(html_of(browser))


def test_how_a_fit_converged_is_a_detail_in_the_margin(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    work = re.sub(r'<aside class="margin".*?</aside>', "", html, flags=re.DOTALL)
    assert text_of(work).count("Fitted to the dataset 'all', version 1: converged") == 2
    for fit in Fit.objects.all():
        result = result_of(fit)
        assert result is not None
        detail = message_text(result.content["message"])
        assert f"converged: {detail}" in text_of(html)
        assert detail not in text_of(work)


def test_every_verdict_is_explained_with_the_projects_own_thresholds(browser: Client, fitted: Study) -> None:
    type(fitted.project).objects.filter(pk=fitted.project.pk).update(verdict_thresholds={"nrmse": 0.08})
    text = text_of(html_of(browser))
    for verdict in ("agrees", "consistent", "strained", "disagrees", "not tested"):
        assert verdict in text
    assert "within 8.0 % of the measured span" in text
    assert "no proof of the path" in text


def test_the_margin_says_where_things_come_from(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    margins = text_of(" ".join(re.findall(r'<aside class="margin".*?</aside>', html, re.DOTALL)))
    fit = Fit.objects.get(mechanism_version__mechanism__name="first order")
    for expected in (
        "made by mira", "written by mira", "table 1 from nmr.txt", "reduction: against the standard v1",
        f"engine {fit.engine_version}", "dataset 'all', version 1", fit.dataset.digest[:10], "revision 1 by mira",
    ):  # fmt: skip
        assert expected in margins
    assert f"{fit.created:%Y-%m-%d}" in margins


def test_results_on_older_data_are_marked_stale_with_the_reason(browser: Client, fitted: Study) -> None:
    from kinetics_db.measurements.services import supersede_table
    from kinetics_db.runs.models import Run

    run = Run.objects.get(code="K01")
    older = run.concentration_tables.get()
    assert "has been superseded" not in html_of(browser)
    newer = fitted.table(run, k=2.1e-3, name="nmr-again.txt")
    supersede_table(user=fitted.user, older=older, newer=newer, reason="phase was wrong")
    html = html_of(browser)
    assert "table 1 of run K01 has been superseded" in text_of(html)
    assert html.count('<strong class="stale">stale</strong>') == 2
    home = text_of(html_of(browser, "/"))
    assert "2 fits finished, 2 stale" in home


def test_a_fit_under_way_shows_its_progress_and_the_page_follows_it(browser: Client, study: Study) -> None:
    study.run("K01")
    fit = study.fit("first order", RIGHT, study.dataset(), compute=False)
    html = html_of(browser)
    assert '<meta http-equiv="refresh" content="3">' in html
    assert "waiting" in text_of(html)
    heartbeat(claimed(fit), progress=0.4375, message="iteration 6, cost 12.5")
    html = html_of(browser)
    assert 'value="0.438"' in html or 'value="0.437"' in html
    assert "running: iteration 6, cost 12.5" in text_of(html)
    assert "1 fit waiting or running" in text_of(html_of(browser, "/"))


def test_the_page_can_be_held_still(browser: Client, study: Study) -> None:
    study.run("K01")
    study.fit("first order", RIGHT, study.dataset(), compute=False)
    html = html_of(browser, f"{ADDRESS}?hold")
    assert "http-equiv" not in html
    assert "held still" in html


def test_a_page_without_work_under_way_stays_as_it_is(browser: Client, fitted: Study) -> None:
    assert "http-equiv" not in html_of(browser)


def test_a_fit_that_failed_says_why(browser: Client, study: Study) -> None:
    study.run("K01")
    fit = study.fit("first order", RIGHT, study.dataset(), compute=False)
    fail_job(claimed(fit), reason="the disk is <full>")
    html = html_of(browser)
    assert "failed" in text_of(html)
    assert "the disk is &lt;full&gt;" in html


def test_an_earlier_fit_on_the_same_data_is_counted_not_shown(browser: Client, fitted: Study) -> None:
    fitted.fit("first order", RIGHT, Fit.objects.earliest("pk").dataset, start=5e-3)
    html = html_of(browser)
    assert "1 earlier fit on the same data is kept" in text_of(html)
    assert html.count('<table class="constants">') == 2


def test_percentages_stay_percentages(browser: Client, study: Study) -> None:
    from kinetics_db.runs.entry import Amount
    from tests.factories.flow import lines, make_reported_table, make_run

    run = make_run(study.user, study.project.pk, "R1", {"ester": Amount(100.0, "%")})
    text = lines(("time / min", "ester / %"), (0, 100.0), (10, 60.5), (20, 36.1))
    make_reported_table(study.user, run, text, {"ester": "ester"}, constant_u=1.0)
    page = text_of(html_of(browser))
    assert "[ester] 0 100 %" in page
    assert "concentration / %" in page
    assert "ester: 3 points, from 100 to 36.1 % between 0 and 20 min" in page


def test_a_project_of_invented_data_says_so(browser: Client, study: Study) -> None:
    assert "invented" not in html_of(browser)
    type(study.project).objects.filter(pk=study.project.pk).update(invented=True)
    assert "The data of this project are invented" in html_of(browser)
    assert "Invented data" in html_of(browser, "/")


def test_an_empty_project_says_what_to_do_first(browser: Client, study: Study) -> None:
    text = text_of(html_of(browser))
    assert "No run yet. First enter the compounds" in text
    assert "No mechanism yet." in text
    assert "No fit has finished yet." in text


def test_a_run_without_a_table_says_what_it_waits_for(browser: Client, study: Study) -> None:
    from kinetics_db.runs.entry import Amount
    from tests.factories.flow import make_run

    make_run(study.user, study.project.pk, "K09", {"alcohol": Amount(0.1, "mol/L")})
    assert "waits for its instrument file" in html_of(browser)


def test_markup_typed_by_people_stays_text(browser: Client, study: Study) -> None:
    study.run("<b>K&1</b>", notes="<script>alert(1)</script>")
    study.version("<i>path</i>", '"<u>S</u>" --k--> P\n# <script>x</script>\n')
    html = html_of(browser)
    assert "<script" not in html and "<i>path" not in html and "<u>S" not in html and "<b>K" not in html
    assert "&lt;b&gt;K&amp;1&lt;/b&gt;" in html


def test_the_page_keeps_to_its_own_content_policy(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    assert not re.search(r"<script|<style|\sstyle=|\son[a-z]+=|javascript:", html)
    assert not re.search(r'(?:src|href)="(?:https?:)?//', html)


def test_ids_are_unique_and_links_on_the_page_lead_somewhere(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    ids = re.findall(r'\sid="([^"]+)"', html)
    assert len(ids) == len(set(ids))
    assert set(re.findall(r'href="[^"]*#([^"]+)"', html)) <= set(ids)
    for labelled in re.findall(r'aria-labelledby="([^"]+)"', html):
        assert set(labelled.split()) <= set(ids)


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


def test_strangers_are_told_nothing_not_even_that_the_project_exists(client: Client, fitted: Study) -> None:
    client.force_login(make_user("stranger"))
    there, nowhere = client.get(ADDRESS), client.get("/projects/no-such-thing/")
    assert there.status_code == nowhere.status_code == 404
    assert there.content.decode().replace("oxidation", "X") == nowhere.content.decode().replace(
        "no-such-thing", "X"
    )


def test_a_reader_sees_the_project(client: Client, fitted: Study) -> None:
    client.force_login(make_member(fitted.project, "reader", "rhea"))
    assert "your role: reader" in text_of(html_of(client))


def test_dates_are_shown_in_the_readers_zone(browser: Client, study: Study) -> None:
    type(study.user).objects.filter(pk=study.user.pk).update(time_zone="Asia/Kolkata")
    there = study.project.created.astimezone(ZoneInfo("Asia/Kolkata"))
    assert f">{there:%Y-%m-%d %H:%M} IST</time>" in html_of(browser)
    type(study.user).objects.filter(pk=study.user.pk).update(time_zone="Nowhere/Else")
    assert " UTC</time>" in html_of(browser)
