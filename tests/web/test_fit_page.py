"""The page of a fit: while it is computed, when it went wrong, and what came out."""

from __future__ import annotations

import csv
import io
import re

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.datasets.models import Dataset
from kinetics_db.engine.fitting.problem import Constant, Settings
from kinetics_db.engine.shown_numbers import interval, plain, with_uncertainty
from kinetics_db.evidence.selectors import evidence_of
from kinetics_db.fits.experiments import data_of
from kinetics_db.fits.models import Fit
from kinetics_db.fits.selectors import result_of
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import fail_job, heartbeat
from kinetics_db.runs.models import Run
from kinetics_db.web.present.fits import run_sheets_of_fit
from tests.factories.flow import compute_now
from tests.factories.people import make_member, make_user
from tests.web.study import RIGHT, WRONG, Study
from tests.web.test_project import claimed, text_of

LIST = "/projects/oxidation/fits/"
HTMX = {"HX-Request": "true"}
MOST_QUERIES_OF_A_LIST = 5


@pytest.fixture
def waiting(study: Study) -> Fit:
    study.run("K01")
    return study.fit("first order", RIGHT, study.dataset(), compute=False)


def page_of_fit(browser: Client, fit: Fit) -> str:
    response = browser.get(f"/fits/{fit.pk}/")
    assert response.status_code == 200
    return response.content.decode()


def first_order() -> Fit:
    return Fit.objects.get(mechanism_version__mechanism__name="first order")


def section(html: str, start: str, end: str) -> str:
    return text_of(html[html.index(f'id="{start}"') : html.index(f'id="{end}"')])


def test_a_fit_under_way_is_followed_in_place_and_without_scripts(browser: Client, waiting: Fit) -> None:
    html = page_of_fit(browser, waiting)
    assert f'hx-get="/fits/{waiting.pk}/progress/" hx-trigger="every 1s"' in html
    assert '<noscript><meta http-equiv="refresh" content="3"></noscript>' in html
    assert "waiting : for a worker to take it up" in text_of(html)
    assert f'action="/fits/{waiting.pk}/stop/"' in html
    heartbeat(claimed(waiting), progress=0.4375, message="iteration 6, cost 12.5e-7")
    fragment = browser.get(f"/fits/{waiting.pk}/progress/", headers=HTMX)
    assert fragment.status_code == 200
    text = fragment.content.decode()
    assert "running : iteration 6, cost 12.5e-7" in text_of(text) and 'value="0.438"' in text
    assert "<html" not in text and "HX-Refresh" not in fragment


def test_when_a_fit_ends_the_page_is_loaded_anew(browser: Client, waiting: Fit) -> None:
    compute_now(waiting)
    response = browser.get(f"/fits/{waiting.pk}/progress/", headers=HTMX)
    assert response["HX-Refresh"] == "true"
    html = page_of_fit(browser, waiting)
    assert 'hx-trigger="every' not in html and "http-equiv" not in html
    assert browser.get(f"/fits/{waiting.pk}/progress/")["Location"] == f"/fits/{waiting.pk}/"


def test_a_fit_is_stopped_and_tried_again(browser: Client, waiting: Fit) -> None:
    response = browser.post(f"/fits/{waiting.pk}/stop/", follow=True)
    text = text_of(response.content.decode())
    assert "was asked to stop" in text and "stopped : stopped before it began" in text
    assert job_for(kind="fit", subject_id=waiting.pk).state == "stopped"
    assert browser.post(f"/fits/{waiting.pk}/stop/").status_code == 409
    response = browser.post(f"/fits/{waiting.pk}/retry/", follow=True)
    assert "is computed again" in text_of(response.content.decode())
    assert job_for(kind="fit", subject_id=waiting.pk).state == "waiting"
    assert browser.post(f"/fits/{waiting.pk}/retry/").status_code == 409


def test_links_cannot_stop_a_fit(browser: Client, waiting: Fit) -> None:
    for what in ("stop", "retry"):
        assert browser.get(f"/fits/{waiting.pk}/{what}/").status_code == 405
    assert job_for(kind="fit", subject_id=waiting.pk).state == "waiting"


def test_a_fit_that_failed_says_why_and_offers_to_try_again(browser: Client, waiting: Fit) -> None:
    fail_job(claimed(waiting), reason="the disk is <full>")
    html = page_of_fit(browser, waiting)
    assert "failed : the disk is <full>" in text_of(html) and "<full>" not in html
    assert f'action="/fits/{waiting.pk}/retry/"' in html and "/stop/" not in html


def test_a_fit_that_cannot_start_shows_the_reason_and_what_was_asked(browser: Client, study: Study) -> None:
    study.run("K01")
    version = study.version("explodes", "alcohol --{ k*exp(1/(k - k)) }--> ketone\n")
    fit = request_fit(
        user=study.user,
        dataset=study.dataset(),
        mechanism_version=version,
        constants=[Constant("k", 1e-3)],
    )
    compute_now(fit)
    text = text_of(page_of_fit(browser, fit))
    assert "cannot start" in text
    assert "What was asked" in text and "Verdicts on" not in text


def test_constants_stand_with_uncertainty_unit_interval_and_place(browser: Client, fitted: Study) -> None:
    fit = first_order()
    html = page_of_fit(browser, fit)
    text = section(html, "constants", "runs")
    result = result_of(fit)
    assert result is not None
    for constant, celsius in zip(result.constants.order_by("where"), ("25 °C", "35 °C"), strict=True):
        value = with_uncertainty(constant.value, constant.standard_error, "1/s")
        assert f"k ox {celsius} {value} {interval(constant.low, constant.high, '1/s')}" in text
    assert "95 % interval" in text


def test_what_is_not_determined_says_why(browser: Client, study: Study) -> None:
    study.run("K01")
    version = study.version("too much", "alcohol --k_a--> ketone\nalcohol --k_b--> ketone\n")
    fit = request_fit(
        user=study.user,
        dataset=study.dataset(),
        mechanism_version=version,
        constants=[Constant("k_a", 1e-3), Constant("k_b", 1e-3)],
    )
    compute_now(fit)
    text = section(page_of_fit(browser, fit), "constants", "runs")
    assert text.count("not determined") >= 2
    assert "only a combination of" in text


def test_each_run_has_its_verdict_in_words_its_tests_and_its_charts(browser: Client, fitted: Study) -> None:
    fit = first_order()
    html = page_of_fit(browser, fit)
    evidence = evidence_of(user=fitted.user, fit_id=fit.pk).content
    for run, judged in zip(Run.objects.order_by("code"), evidence["runs"], strict=True):
        start = html.index(f'id="run-{run.pk}"')
        part = html[start : html.index("</article>", start)]
        text = text_of(part)
        assert f"{judged['verdict']} Decided by {judged['worst_observable']}: chi-square p" in text
        assert part.count('<figure class="chart"') == 2
        for one in judged["observables"]:
            chi_square = (
                f"{plain(one['chi_square'], digits=3)} on {plain(one['degrees_of_freedom'], digits=3)}"
            )
            assert f"{one['observable']} {one['verdict']} 13 {chi_square}" in text
        assert f'href="/runs/{run.pk}/"' in part
    assert "Verdicts on the 2 runs: agrees 2" in text_of(html)


def test_only_the_first_charts_come_with_the_page_and_the_others_when_asked_for(
    browser: Client, fitted: Study, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("kinetics_db.web.views.fits.CHARTS_AT_ONCE", 1)
    fit = first_order()
    html = page_of_fit(browser, fit)
    assert html.count('<figure class="chart"') == 2
    address = f"/fits/{fit.pk}/runs/2/"
    assert f'hx-get="{address}" hx-trigger="intersect once"' in html
    part = browser.get(address, headers=HTMX).content.decode()
    assert part.count('<figure class="chart"') == 2 and "<html" not in part
    whole = browser.get(address).content.decode()
    assert whole.count('<figure class="chart"') == 2 and "K02 in fit" in text_of(whole)
    for position in (0, 3, 10**18):
        assert browser.get(f"/fits/{fit.pk}/runs/{position}/").status_code == 404


def test_points_that_the_dataset_leaves_out_are_drawn_as_such(browser: Client, study: Study) -> None:
    from kinetics_db.datasets.services import Window, freeze_dataset

    run = study.run("K01")
    table = run.concentration_tables.get()
    dataset = freeze_dataset(
        user=study.user,
        project_id=study.project.pk,
        name="part",
        table_ids=[table.pk],
        windows={table.pk: Window(start=100.0, left_out={"ketone@5": "air bubble"})},
    )
    html = page_of_fit(browser, study.fit("first order", RIGHT, dataset))
    assert re.findall(r'"left_out":(\[[^\]]*\])', html)[:2] == ["[0]", "[0,5]"]


def test_causes_of_error_are_listed_the_farthest_first_and_marked(browser: Client, study: Study) -> None:
    study.run("K01", start=0.1)
    dataset = study.dataset()
    fit = study.fit("second order", WRONG, dataset, start=1e-2)
    result = result_of(fit)
    assert result is not None
    pulls = sorted(result.content["pulls"], key=lambda pull: -abs(pull["pull"]))
    html = page_of_fit(browser, fit)
    rows = re.findall(
        r"<tr( class=\"far\")?><th scope=\"row\">([^<]+)</th>", html[html.index('id="pulls"') :]
    )
    assert [name for _, name in rows] == [pull["name"] for pull in pulls]
    assert [bool(far) for far, _ in rows] == [abs(pull["pull"]) > 2 for pull in pulls]
    assert any(far for far, _ in rows)
    (judged,) = evidence_of(user=study.user, fit_id=fit.pk).content["runs"]
    farthest = max(judged["pulls"], key=lambda pull: abs(pull["pull"]))
    assert abs(farthest["pull"]) > 3
    name = farthest["name"].removeprefix("run K01: ")
    assert f"The fit had to move {name} by" in text_of(html)


def test_a_strain_by_what_was_moved_is_not_put_down_to_a_test(browser: Client, fitted: Study) -> None:
    fit = first_order()
    content = evidence_of(user=fitted.user, fit_id=fit.pk).content
    content["runs"][0] |= {"verdict": "strained"}
    content["runs"][0]["pulls"][0] |= {"pull": -4.24}
    first, second = run_sheets_of_fit(data_of(fit.dataset), content)
    assert first.words.startswith("the tests pass, the least ")
    assert first.moved == "charge 1 by −4.2 u"
    assert second.words.startswith("decided by ") and second.moved == ""


def test_scatter_minima_and_correlations_are_shown_where_there_are_any(browser: Client, study: Study) -> None:
    study.run("K01")
    study.run("K02", kelvin=308.15, k=4e-3)
    fit = request_fit(
        user=study.user,
        dataset=study.dataset(),
        mechanism_version=study.version("first order", RIGHT),
        constants=[Constant("k_ox", 1e-3, scope="in a group", group_by="temperature")],
        settings=Settings(error_model="one sigma per observable", starts=3),
    )
    compute_now(fit)
    result = result_of(fit)
    assert result is not None
    content = result.content
    html = page_of_fit(browser, fit)
    text = text_of(html)
    assert "Scatter of the points, found by the fit" in text
    assert f"alcohol {plain(content['sigmas'][0]['value'], 'mol/L', digits=3)} 26" in text
    assert "Where the starts ended" in text
    assert sum(m["found"] for m in content["minima"]) >= 1
    assert f"0.0 {content['minima'][0]['found']}" in section(html, "minima", "asked")
    found = section(html, "correlations", "asked")
    covariance = content["covariance"]
    names = [p["name"] for p in content["parameters"]]
    i, j = names.index("k_ox @ 298.15 K"), names.index("k_ox @ 308.15 K")
    correlation = covariance[i][j] / (covariance[i][i] * covariance[j][j]) ** 0.5
    assert f"k ox , 35 °C {plain(round(correlation, 3), digits=3)} 1" in found


def test_neither_scatter_nor_minima_where_there_are_none(browser: Client, fitted: Study) -> None:
    text = text_of(page_of_fit(browser, first_order()))
    assert "Scatter of the points" not in text and "Where the starts ended" not in text


def test_the_margin_says_what_the_fit_was_made_from_and_by_what(browser: Client, fitted: Study) -> None:
    fit = first_order()
    html = page_of_fit(browser, fit)
    result = result_of(fit)
    assert result is not None
    margin = text_of(html[html.index('<aside class="margin"') : html.index("</aside>")])
    for expected in (
        "dataset 'all', version 1", "first order v1", "asked for by mira", f"engine {fit.engine_version}",
        "numpy ", fit.digest[:10], result.digest[:10], fit.dataset.digest[:10], "computed in",
        "current: its data are the newest",
    ):  # fmt: skip
        assert expected in margin
    assert f'href="/datasets/{fit.dataset_id}/"' in html
    assert f'href="/projects/oxidation/fits/new/?like={fit.pk}"' in html


def test_a_fit_on_older_data_is_marked_stale_with_the_reason(browser: Client, fitted: Study) -> None:
    from kinetics_db.measurements.services import supersede_table

    run = Run.objects.get(code="K01")
    older = run.concentration_tables.get()
    newer = fitted.table(run, k=2.1e-3, name="again.txt")
    supersede_table(user=fitted.user, older=older, newer=newer, reason="phase was wrong")
    assert "table 1 of run K01 has been superseded" in text_of(page_of_fit(browser, first_order()))
    assert text_of(browser.get(LIST).content.decode()).count("all v1 stale") == 2


def test_the_files_hold_every_digit(browser: Client, fitted: Study) -> None:
    fit = first_order()
    result = result_of(fit)
    assert result is not None
    content = result.content

    def rows_of(address: str) -> list[dict[str, str]]:
        response = browser.get(address)
        assert response["Content-Type"] == "text/csv; charset=utf-8"
        text = b"".join(response.streaming_content).decode()  # type: ignore[attr-defined]
        return list(csv.DictReader(io.StringIO(text)))

    constants = rows_of(f"/fits/{fit.pk}/constants.csv")
    assert [float(row["value"]) for row in constants] == [p["value"] for p in content["parameters"]]
    points = rows_of(f"/fits/{fit.pk}.csv")
    assert len(points) == 2 * 2 * 13
    first = content["experiments"][0]
    assert points[0]["run"] == "K01" and points[0]["observable"] == "alcohol"
    assert float(points[1]["model_mol_per_L"]) == first["model"][1][0]
    assert float(points[1]["standardised_residual"]) == first["standardised"][1][0]


def test_the_list_shows_each_fit_with_its_state_and_verdicts(browser: Client, fitted: Study) -> None:
    other = fitted.fit("first order", RIGHT, Dataset.objects.get(), start=5e-3, compute=False)
    text = text_of(browser.get(LIST).content.decode())
    assert f"fit {other.pk} first order v1 all v1 waiting –" in text
    assert f"fit {Fit.objects.earliest('pk').pk} first order v1 all v1 converged agrees 2" in text
    assert text.index(f"fit {other.pk} ") < text.index("converged")


def test_the_list_takes_few_queries_however_long_it_is(browser: Client, fitted: Study) -> None:
    browser.get(LIST)
    dataset = Dataset.objects.get()
    for number in range(55):
        fitted.fit("first order", RIGHT, dataset, start=1e-3 * (2 + number), compute=False)
    with CaptureQueriesContext(connection) as queries:
        response = browser.get(LIST)
    assert len(queries) <= MOST_QUERIES_OF_A_LIST, [q["sql"][:120] for q in queries]
    assert response.content.decode().count('<th scope="row">') == 50
    following = browser.get(f"{LIST}?cursor={response.context['page'].next}").content.decode()
    assert following.count('<th scope="row">') == 7


def test_an_empty_list_says_what_comes_first(browser: Client, study: Study) -> None:
    assert "First freeze concentration tables" in text_of(browser.get(LIST).content.decode())


def test_a_page_of_many_runs_stays_small_and_takes_the_same_queries(browser: Client, study: Study) -> None:
    sizes, counts = [], []
    for codes in (("K01", "K02", "K03", "K04"), tuple(f"L{i:02}" for i in range(12))):
        for code in codes:
            study.run(code)
        fit = study.fit("first order", RIGHT, study.dataset())
        page_of_fit(browser, fit)
        with CaptureQueriesContext(connection) as queries:
            html = page_of_fit(browser, fit)
        counts.append(len(queries))
        sizes.append(len(html))
    assert counts[0] == counts[1]
    assert (sizes[1] - sizes[0]) / 12 < 4_000  # bytes a run more, so that 35 runs are far below 500 kB
    assert sizes[1] < 150_000


def test_readers_see_everything_and_may_do_nothing(client: Client, study: Study, waiting: Fit) -> None:
    client.force_login(make_member(study.project, "reader", "rhea"))
    html = page_of_fit(client, waiting)
    assert "/stop/" not in html and "fits/new/" not in html
    for what in ("stop", "retry"):
        assert client.post(f"/fits/{waiting.pk}/{what}/").status_code == 403
    assert "fits/new/" not in client.get(LIST).content.decode()


def test_strangers_learn_nothing_and_the_anonymous_are_asked_to_log_in(client: Client, fitted: Study) -> None:
    fit = first_order()
    paths = ("", "progress/", "runs/1/", "constants.csv")
    addresses = [LIST, *(f"/fits/{fit.pk}/{path}" for path in paths), f"/fits/{fit.pk}.csv"]
    for address in addresses:
        assert client.get(address)["Location"].startswith("/login/")
    client.force_login(make_user("stranger"))
    for address in [*addresses, "/fits/999999999999999999999999/"]:
        assert client.get(address).status_code == 404
    for what in ("stop", "retry"):
        assert client.post(f"/fits/{fit.pk}/{what}/").status_code == 404


def test_numbers_of_a_fit_without_a_result_are_not_there_yet(browser: Client, waiting: Fit) -> None:
    for path in (".csv", "/constants.csv", "/runs/1/"):
        response = browser.get(f"/fits/{waiting.pk}{path}")
        assert response.status_code == 404
        assert "no result yet" in response.content.decode()


def test_the_page_keeps_to_its_own_content_policy(browser: Client, fitted: Study) -> None:
    html = page_of_fit(browser, first_order())
    assert not re.search(r"<style|\sstyle=|\son[a-z]+=|javascript:", html)
    assert all(
        'type="application/json"' in tag or "src=" in tag for tag in re.findall(r"<script[^>]*>", html)
    )
    ids = re.findall(r'\sid="([^"]+)"', html)
    assert len(ids) == len(set(ids))
    assert set(re.findall(r'href="#([^"]+)"', html)) <= set(ids)
