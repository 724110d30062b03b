"""The list of runs: filter, order, pages, small curves, the download."""

from __future__ import annotations

import csv
import io
import re
from html import unescape

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from kinetics_db.runs.services import seal_run
from tests.factories.flow import make_run
from tests.factories.people import make_member, make_user
from tests.web.study import Study

LIST = "/projects/oxidation/runs/"
DOWNLOAD = "/projects/oxidation/runs.csv"


def text_of(html: str) -> str:
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", html)).split())


def codes_in(html: str) -> list[str]:
    return re.findall(r'<th scope="row"><a href="/runs/\d+/">([^<]+)</a>', html)


def page_of(browser: Client, **asked: str) -> str:
    response = browser.get(LIST, asked)
    assert response.status_code == 200
    return response.content.decode()


def charged(study: Study, code: str, **more: object) -> Run:
    """A run of 10 mmol/L of the alcohol without a file."""
    return make_run(study.user, study.project.pk, code, {"alcohol": Amount(10.0, "mmol/L", 0.1)}, **more)


def test_a_run_is_listed_with_its_conditions_and_a_small_curve(browser: Client, study: Study) -> None:
    study.run("K01")
    charged(study, "K02", control_kind="blank", replicate_of="K01")
    html = page_of(browser)
    assert codes_in(html) == ["K02", "K01"]
    assert html.count('<svg class="thumb"') == 1
    text = text_of(html)
    assert "[alcohol] 0 mmol/L" in text
    assert "25.00(20) 100.0(1.0)" in text
    assert "waits for its file" in text
    assert "control: blank replicate of K01" in text
    assert "1 table" in text
    assert f'href="/projects/oxidation/runs/new/?copy={Run.objects.get(code="K01").pk}"' in html
    assert "style=" not in html


def test_a_sealed_run_says_so(browser: Client, study: Study) -> None:
    seal_run(user=study.user, run=charged(study, "K01"))
    assert "sealed" in text_of(page_of(browser))


def test_compounds_beyond_the_columns_stand_in_words(browser: Client, study: Study) -> None:
    amounts = {f"part{i}": Amount(float(i + 1), "mmol/L") for i in range(8)}
    make_run(study.user, study.project.pk, "K01", amounts)
    text = text_of(page_of(browser))
    assert text.count("mmol/L") >= 6
    assert "part7 8 mmol/L" in text or "part7 8" in text
    assert "Also put in" in text


def test_a_run_in_percent_says_so_beside_runs_in_moles(browser: Client, study: Study) -> None:
    charged(study, "K01")
    make_run(study.user, study.project.pk, "P01", {"alcohol": Amount(100.0, "%")})
    text = text_of(page_of(browser))
    assert "100 %" in text
    assert "10.00(10)" in text


def test_the_filter_finds_runs_by_their_conditions(browser: Client, study: Study) -> None:
    charged(study, "K01", temperature=Amount(40.0, "degC"))
    charged(study, "K02", temperature=Amount(25.0, "degC"))
    html = page_of(browser, q="[alcohol]0 5..15 mM, 40 degC")
    assert codes_in(html) == ["K01"]
    assert 'value="[alcohol]0 5..15 mM, 40 degC"' in html
    assert "No run is like that" in page_of(browser, q="[alcohol]0 >= 1 M")


@pytest.mark.parametrize(
    "wrong", ["colour blue, 40 degC <b>", "[alcohol]0 5..x mM", "x" * 5000, "T 5 s", "a\x00b"]
)
def test_a_filter_that_cannot_be_read_lists_nothing_and_says_what_is_accepted(
    browser: Client, study: Study, wrong: str
) -> None:
    charged(study, "K01")
    response = browser.get(LIST, {"q": wrong})
    assert response.status_code == 400
    html = response.content.decode()
    assert codes_in(html) == []
    assert 'id="q-wrong" role="alert"' in html
    assert "<b>" not in html.partition('id="q-wrong"')[2].partition("</ul>")[0]
    assert "No run" not in text_of(html)


@pytest.mark.parametrize(
    ("order", "codes"),
    [
        ("newest", ["B", "C", "A"]),
        ("oldest", ["A", "C", "B"]),
        ("code", ["A", "B", "C"]),
        ("code, from the end", ["C", "B", "A"]),
    ],
)
def test_the_list_is_sorted_on_the_server(
    browser: Client, study: Study, order: str, codes: list[str]
) -> None:
    for code in ("A", "C", "B"):
        charged(study, code)
    assert codes_in(page_of(browser, by=order)) == codes


def test_headings_say_how_the_list_is_sorted_and_turn_it_round(browser: Client, study: Study) -> None:
    charged(study, "A")
    html = page_of(browser, q="A")
    assert re.search(r'<th scope="col" aria-sort="descending">Logged<span class="sub">newest first', html)
    assert 'href="?q=A&amp;by=oldest"' in html
    turned = page_of(browser, by="code")
    assert re.search(r'<th scope="col" aria-sort="ascending">Run', turned)
    assert 'href="?by=code%2C+from+the+end"' in turned
    assert 'href="?by=newest"' in turned


@pytest.mark.parametrize("asked", [{"by": "colour"}, {"cursor": "x"}, {"cursor": "%00"}, {"by": "\x00"}])
def test_an_address_that_means_nothing_is_refused_in_words(
    browser: Client, study: Study, asked: dict[str, str]
) -> None:
    response = browser.get(LIST, asked)
    assert response.status_code == 400
    assert "The address cannot be used as it is" in text_of(response.content.decode())


def test_pages_of_fifty_lead_on_and_keep_filter_and_order(browser: Client, study: Study) -> None:
    for i in range(52):
        charged(study, f"K{i:02d}")
    html = page_of(browser, by="code", q="K")
    assert codes_in(html) == [f"K{i:02d}" for i in range(50)]
    following = re.search(r'rel="next" href="(\?[^"]+)"', html)
    assert following is not None
    second = browser.get(LIST + unescape(following[1])).content.decode()
    assert codes_in(second) == ["K50", "K51"]
    assert 'value="K"' in second
    before = re.search(r'rel="prev" href="(\?[^"]+)"', second)
    assert before is not None
    assert codes_in(browser.get(LIST + unescape(before[1])).content.decode())[0] == "K00"


def test_a_page_costs_five_queries_however_many_runs_it_lists(browser: Client, study: Study) -> None:
    for i in range(3):
        study.run(f"K{i}")
    for i in range(20):
        charged(study, f"L{i}", replicate_of="K1")
    browser.get(LIST)
    with CaptureQueriesContext(
        connection,
    ) as counted:
        html = page_of(browser, q="[alcohol]0, 20..30 degC")
    assert len(codes_in(html)) == 3
    with CaptureQueriesContext(connection) as all_runs:
        assert len(codes_in(page_of(browser))) == 23
    assert max(len(counted), len(all_runs)) <= 5


def test_an_empty_list_says_what_to_do_first(browser: Client, study: Study, client: Client) -> None:
    assert "First enter the compounds, lots and stocks" in text_of(page_of(browser))
    client.force_login(make_member(study.project, "reader"))
    text = text_of(client.get(LIST).content.decode())
    assert "Contributors of the project log them" in text
    assert "Log a run" not in text


def test_strangers_and_the_anonymous_see_no_list(client: Client, study: Study) -> None:
    for address in (LIST, DOWNLOAD):
        assert client.get(address)["Location"].startswith("/login/")
    client.force_login(make_user("stranger"))
    assert {client.get(address).status_code for address in (LIST, DOWNLOAD)} == {404}


def test_the_download_holds_all_pages_with_every_digit(browser: Client, study: Study) -> None:
    for i in range(3):
        charged(study, f"K{i}", temperature=Amount(40.0, "degC", 0.1))
    charged(study, "=1+1", control_kind="blank")
    response = browser.get(DOWNLOAD, {"by": "code"})
    assert response["Content-Type"].startswith("text/csv")
    rows = list(csv.DictReader(io.StringIO(b"".join(response.streaming_content).decode())))
    assert [row["code"] for row in rows] == ["'=1+1", "K0", "K1", "K2"]
    assert float(rows[1]["temperature / K"]) == 313.15
    assert float(rows[1]["[alcohol]0"]) == 0.01
    assert float(rows[1]["u([alcohol]0)"]) == pytest.approx(1e-4)
    assert rows[0]["control"] == "blank"
    assert rows[1]["basis"] == "mol/L"
    filtered = browser.get(DOWNLOAD, {"q": "control blank"})
    assert len(b"".join(filtered.streaming_content).decode().splitlines()) == 2


def test_a_download_of_a_wrong_filter_is_refused(browser: Client, study: Study) -> None:
    assert browser.get(DOWNLOAD, {"q": "colour ="}).status_code == 400
