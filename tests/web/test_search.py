"""The search of the top line."""

from __future__ import annotations

from urllib.parse import parse_qs, quote_plus, urlsplit

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.projects.services import create_project
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_user
from tests.web.reading import html_of, text_of
from tests.web.study import RIGHT, WRONG, Study

MOST_QUERIES = 7


def address(text: str, project: str = "") -> str:
    return f"/search/?q={quote_plus(text)}" + (f"&project={project}" if project else "")


@pytest.fixture
def two_studies(study: Study) -> Study:
    """K01 and K02 in the study, K02 and Z1 in another one."""
    for code in ("K01", "K02"):
        make_run(study.user, study.project.pk, code, {"alcohol": Amount(0.1, "mol/L")})
    other = create_project(user=study.user, slug="other", name="Another study")
    for code in ("K02", "Z1"):
        make_run(study.user, other.pk, code, {"amine": Amount(0.2, "mol/L")})
    return study


@pytest.mark.parametrize("text", ["K01", " K01 ", "k01"])
def test_a_runs_code_leads_straight_to_the_run(browser: Client, two_studies: Study, text: str) -> None:
    response = browser.get(address(text))
    assert response["Location"] == f"/runs/{Run.objects.get(code='K01').pk}/"


def test_a_code_of_two_projects_is_a_choice_unless_one_project_is_searched(
    browser: Client, two_studies: Study
) -> None:
    text = text_of(html_of(browser, address("K02")))
    assert "K02 in Oxidation of an alcohol" in text and "K02 in Another study" in text
    run = Run.objects.get(code="K02", project__slug="other")
    assert browser.get(address("K02", "other"))["Location"] == f"/runs/{run.pk}/"


@pytest.mark.parametrize("text", ["[alcohol]0 50..150 mM", "40 degC", "by mira, no table", "control blank"])
def test_conditions_lead_to_the_projects_list_of_runs(browser: Client, two_studies: Study, text: str) -> None:
    where = urlsplit(browser.get(address(text, "oxidation"))["Location"])
    assert where.path == "/projects/oxidation/runs/"
    assert parse_qs(where.query) == {"q": [text]}
    assert browser.get(address(text, "oxidation"), follow=True).status_code == 200


def test_conditions_without_a_project_find_runs_of_all(browser: Client, two_studies: Study) -> None:
    text = text_of(html_of(browser, address("[amine]0 200 mM")))
    assert "Z1 in Another study" in text and "K02 in Another study" in text and "K01" not in text
    assert "No run fits these conditions" in text_of(html_of(browser, address("[amine]0 3 mM")))


def test_part_of_a_name_finds_what_has_it(browser: Client, two_studies: Study) -> None:
    two_studies.version("oxidation by steps", RIGHT)
    two_studies.version("oxidation by steps", WRONG)
    two_studies.table(Run.objects.get(code="K01"))
    dataset = two_studies.dataset("oxidations")
    html = html_of(browser, address("oxidation"))
    text = text_of(html)
    assert "oxidation by steps v2" in text and "oxidation by steps v1" not in text
    assert f'href="/datasets/{dataset.pk}/"' in html
    html = html_of(browser, address("ALC"))
    assert "alcohol in Oxidation of an alcohol" in text_of(html)
    assert 'href="/projects/oxidation/runs/?q=%5Balcohol%5D0"' in html
    assert "K01 in Oxidation" in text_of(html_of(browser, address("0")))


def test_only_so_many_of_a_kind_are_shown(browser: Client, study: Study) -> None:
    for i in range(22):
        make_run(study.user, study.project.pk, f"Q{i:02d}", {"alcohol": Amount(0.1, "mol/L")})
    text = text_of(html_of(browser, address("Q")))
    assert "Q19" in text and "Q20" not in text
    assert "Only 20 are shown" in text


def test_strangers_find_nothing(client: Client, two_studies: Study) -> None:
    client.force_login(make_user("stranger"))
    for text in ("K01", "alcohol", "[alcohol]0", "oxidation"):
        page = html_of(client, address(text))
        assert "/runs/" not in page and "in Oxidation" not in page
    assert client.get(address("K01", "oxidation")).status_code == 404
    client.logout()
    assert client.get(address("K01")).status_code == 302


def test_what_cannot_be_read_as_conditions_is_said_kindly(browser: Client, two_studies: Study) -> None:
    text = text_of(html_of(browser, address("[alcohol]0 50..")))
    assert "At character 1" in text
    text = text_of(html_of(browser, address("455 nm")))
    assert "Wavelengths of lamps are not recorded yet" in text
    assert "Nothing in your projects has this in its name" in text_of(html_of(browser, address("zzz")))


def test_a_found_name_of_two_words_is_no_wrong_condition(browser: Client, study: Study) -> None:
    study.version("second order", WRONG)
    text = text_of(html_of(browser, address("second order")))
    assert "second order v1" in text and "not understood" not in text


@pytest.mark.parametrize(
    ("text", "status"),
    [
        ("a\x00b", 400),
        ("x" * 10_000, 400),
        ("<script>alert(1)</script>", 200),
        ("1e400", 200),
        ("[" * 200, 200),
        ('"', 200),
        ("%_\\", 200),
        ("酸化 🧪", 200),
        ("", 200),
    ],
)
def test_hostile_searches_are_answered_escaped(
    browser: Client, two_studies: Study, text: str, status: int
) -> None:
    html = html_of(browser, address(text), status=status)
    assert "<script>alert" not in html
    if "script" in text:
        assert 'value="&lt;script&gt;alert(1)&lt;/script&gt;"' in html


@pytest.mark.parametrize("text", ["K0", "alcohol", "zzz"])
def test_a_search_costs_few_queries(browser: Client, two_studies: Study, text: str) -> None:
    with CaptureQueriesContext(connection) as queries:
        html_of(browser, address(text, "oxidation"))
    assert len(queries) <= MOST_QUERIES
