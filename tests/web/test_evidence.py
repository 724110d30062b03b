"""The evidence grid of a project."""

from __future__ import annotations

import csv
import re

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.engine.shown_numbers import percent, probability
from kinetics_db.evidence.models import RunEvidence
from kinetics_db.evidence.selectors import evidence_of, grid_of
from kinetics_db.fits.models import Fit
from kinetics_db.measurements.services import supersede_table
from kinetics_db.mechanisms.models import Mechanism
from kinetics_db.runs.models import Run
from tests.factories.people import make_member
from tests.web.reading import html_of as page_at
from tests.web.reading import margins_of, text_of
from tests.web.study import RIGHT, WRONG, Study

ADDRESS = "/projects/oxidation/evidence/"
MOST_QUERIES = 8


def html_of(browser: Client, query: str = "", *, status: int = 200) -> str:
    return page_at(browser, ADDRESS + query, status=status)


def rows_of(html: str) -> dict[str, list[str]]:
    """The cells of each run's row, temperature left out."""
    rows = re.findall(r'<tr><th scope="row"><a href="/runs/\d+/">(.*?)</a></th>(.*?)</tr>', html, re.DOTALL)
    return {code: cells.split("</td>")[1:-1] for code, cells in rows}


def test_every_cell_shows_its_verdict_with_p_and_error_of_one_observable(
    browser: Client, fitted: Study
) -> None:
    html = html_of(browser)
    grid = grid_of(user=fitted.user, project_id=fitted.project.pk)
    assert len(grid.cells) == 4
    verdicts = {key: cell.verdict for key, cell in grid.cells.items()}
    assert "disagrees" in verdicts.values() and "agrees" in verdicts.values()
    rows = rows_of(html)
    assert list(rows) == ["K01", "K02"]
    for code, cells in rows.items():
        for column, cell in zip(grid.columns, cells, strict=True):
            evidence = evidence_of(user=fitted.user, fit_id=column.fit_id)
            (run,) = (r for r in evidence.content["runs"] if r["experiment"] == code)
            (one,) = (o for o in run["observables"] if o["observable"] == run["worst_observable"])
            p = min(one["chi_square_p_adjusted"], one["runs_p_adjusted"])
            expected = f"{one['observable']}: p {probability(p)}, NRMSE {percent(one['nrmse'])}"
            assert text_of(cell).startswith(verdicts[code, column.fit_id])
            assert expected in text_of(cell)
            run_id = Run.objects.get(code=code).pk
            assert f'href="/fits/{column.fit_id}/#run-{run_id}"' in cell
    deltas = [c.delta_aicc for c in grid.columns if c.delta_aicc is not None]
    assert len(deltas) == 2 and min(deltas) == 0.0
    assert f"{max(deltas):,.1f}".replace(",", "\N{NARROW NO-BREAK SPACE}") in html
    assert "25.00(20) °C" in text_of(html) and "35.00(20) °C" in text_of(html)


def test_a_cell_leads_to_the_place_of_its_run_on_the_page_of_the_fit(browser: Client, fitted: Study) -> None:
    for address, anchor in re.findall(r'href="(/fits/\d+/)#(run-\d+)"', html_of(browser)):
        assert f'id="{anchor}"' in page_at(browser, address)


def test_heads_lead_to_the_version_and_the_fit(browser: Client, fitted: Study) -> None:
    html = html_of(browser)
    for fit in Fit.objects.all():
        assert f'<a href="/versions/{fit.mechanism_version_id}/">{fit.mechanism_version}</a>' in html
        assert f'<a href="/fits/{fit.pk}/">fit {fit.pk}</a>' in html


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


def test_every_verdict_is_explained_with_the_projects_own_thresholds(browser: Client, fitted: Study) -> None:
    type(fitted.project).objects.filter(pk=fitted.project.pk).update(verdict_thresholds={"nrmse": 0.08})
    text = text_of(html_of(browser))
    for verdict in ("agrees", "consistent", "strained", "disagrees", "not tested"):
        assert verdict in text
    assert "within 8.0 % of the measured span" in text
    assert "no proof of the path" in text


def test_the_margin_says_where_the_evidence_comes_from(browser: Client, fitted: Study) -> None:
    margins = margins_of(html_of(browser))
    for fit in Fit.objects.all():
        for expected in (
            str(fit.mechanism_version), f"fit {fit.pk} , asked for by mira", f"engine {fit.engine_version}",
            "dataset 'all', version 1", fit.dataset.digest[:10], f"{fit.created:%Y-%m-%d}",
        ):  # fmt: skip
            assert expected in margins


def test_results_on_older_data_are_marked_stale_with_the_reason(browser: Client, fitted: Study) -> None:
    run = Run.objects.get(code="K01")
    older = run.concentration_tables.get()
    assert "has been superseded" not in html_of(browser)
    newer = fitted.table(run, k=2.1e-3, name="nmr-again.txt")
    supersede_table(user=fitted.user, older=older, newer=newer, reason="phase was wrong")
    html = html_of(browser)
    assert "table 1 of run K01 has been superseded" in margins_of(html)
    assert html.count('<strong class="stale">stale</strong>') == 2


def test_only_the_newest_fit_of_a_version_on_a_dataset_is_a_column(browser: Client, fitted: Study) -> None:
    again = fitted.fit("first order", RIGHT, Fit.objects.earliest("pk").dataset, start=5e-3)
    html = html_of(browser)
    assert html.count('scope="col" class="model"') == 2
    assert f"fit {again.pk}" in html and f"fit {Fit.objects.earliest('pk').pk}<" not in html


def test_runs_are_chosen_by_a_filter(browser: Client, fitted: Study) -> None:
    assert list(rows_of(html_of(browser, "?q=35+degC"))) == ["K02"]
    assert list(rows_of(html_of(browser, "?q=K01"))) == ["K01"]
    assert "No run with a verdict fits these conditions" in text_of(html_of(browser, "?q=99+degC"))


def test_a_filter_that_cannot_be_read_says_why_and_lists_nothing(browser: Client, fitted: Study) -> None:
    html = html_of(browser, "?q=%5Balcohol+%3Cb%3E", status=400)
    assert "At character 1: A bracket is not closed" in text_of(html)
    assert 'value="[alcohol &lt;b&gt;"' in html and not rows_of(html)


def test_one_mechanism_can_be_chosen(browser: Client, fitted: Study) -> None:
    html = html_of(browser, "?mechanism=first+order")
    assert html.count('scope="col" class="model"') == 1
    assert '<option value="first order" selected>' in html
    assert "0.0" in html, "it is still compared with the one that is not shown"
    for asked in ("nothing", "%00", "%3Cscript%3E", "x" * 5000):
        assert "<script>" not in html_of(browser, f"?mechanism={asked}", status=404)


def test_a_run_that_was_never_tried_with_a_model_says_so(browser: Client, fitted: Study) -> None:
    fitted.run("K03")
    fitted.fit("third", RIGHT, fitted.dataset("with K03"))
    rows = rows_of(html_of(browser))
    assert [text_of(cell) for cell in rows["K03"]][:2] == ["never tried", "never tried"]
    assert "agrees" in rows["K03"][2]


def test_more_runs_than_fit_on_a_page_are_reached_by_its_links(
    browser: Client, fitted: Study, monkeypatch: pytest.MonkeyPatch
) -> None:
    import kinetics_db.web.views.evidence as views
    from kinetics_db.paging import page_of

    monkeypatch.setattr(views, "page_of", lambda rows, **how: page_of(rows, **how | {"size": 1}))
    first = html_of(browser, "?mechanism=first+order")
    assert list(rows_of(first)) == ["K01"]
    (after,) = re.findall(r'rel="next" href="([^"]+)"', first)
    assert "mechanism=first+order" in after
    second = html_of(browser, after.replace("&amp;", "&"))
    assert list(rows_of(second)) == ["K02"] and second.count('class="model"') == 1
    text = b"".join(browser.get("/projects/oxidation/evidence.csv")).decode()  # type: ignore[arg-type]
    assert text.count("\r\n") == 1 + 4, "the file holds all pages"


def test_older_versions_beyond_those_side_by_side_are_counted(browser: Client, study: Study) -> None:
    study.run("K01")
    dataset = study.dataset()
    for i in range(14):
        study.fit("much tried", f"alcohol --k{i}--> ketone\n", dataset)
    html = html_of(browser)
    assert html.count('scope="col" class="model"') == 12
    assert "much tried v3<" in html and "much tried v2<" not in html
    assert "(2 more)" in text_of(html)


def test_the_grid_is_a_file_too(browser: Client, fitted: Study) -> None:
    Run.objects.filter(code="K02").update(code="=2+2")
    fitted.run("K03")
    response = browser.get("/projects/oxidation/evidence.csv?q=")
    assert response["Content-Disposition"] == 'attachment; filename="oxidation-evidence.csv"'
    rows = list(csv.DictReader(b"".join(response).decode().splitlines()))  # type: ignore[arg-type]
    assert [row["run"] for row in rows] == ["'=2+2", "'=2+2", "K01", "K01"]
    grid = grid_of(user=fitted.user, project_id=fitted.project.pk)
    for row in rows[2:]:
        cell = grid.cells["K01", int(row["fit"])]
        assert (row["verdict"], row["observable"], float(row["p"])) == (
            cell.verdict,
            cell.observable,
            cell.p_value,
        )
    only = browser.get("/projects/oxidation/evidence.csv?mechanism=second+order&q=K01")
    assert b"".join(only).count(b"\r\n") == 2  # type: ignore[arg-type]
    assert browser.get("/projects/oxidation/evidence.csv?q=%5B").status_code == 400


def test_a_project_without_a_finished_fit_says_what_to_do(client: Client, study: Study) -> None:
    client.force_login(study.user)
    html = html_of(client)
    assert "No fit has finished yet. First write a mechanism" in text_of(html)
    client.force_login(make_member(study.project, "reader"))
    html = html_of(client)
    assert "No fit has finished yet." in text_of(html) and "/new/" not in html


def test_markup_typed_by_people_stays_text(browser: Client, study: Study) -> None:
    study.run("<b>K&1</b>")
    study.fit("<i>path</i>", RIGHT, study.dataset("<u>S</u>"))
    html = html_of(browser)
    assert "<i>path" not in html and "<u>S" not in html and "<b>K" not in html
    assert "&lt;b&gt;K&amp;1&lt;/b&gt;" in html and "&lt;i&gt;path&lt;/i&gt;" in html
    assert Mechanism.objects.get().name == "<i>path</i>"


def test_the_number_of_queries_does_not_grow_with_runs_and_fits(browser: Client, study: Study) -> None:
    counts = []
    for codes in (("K01", "K02"), ("K03", "K04", "K05")):
        for code in codes:
            study.run(code)
        dataset = study.dataset()
        study.fit("first order", RIGHT, dataset)
        study.fit("second order", WRONG, dataset, start=1e-2)
        with CaptureQueriesContext(connection) as queries:
            html_of(browser)
        counts.append(len(queries))
    assert counts[0] == counts[1] <= MOST_QUERIES, "\n".join(q["sql"][:200] for q in queries)
