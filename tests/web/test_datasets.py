"""Datasets on pages: tables are chosen by the runs' conditions, frozen, and looked at again."""

from __future__ import annotations

import csv
import io

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.datasets.models import Dataset
from kinetics_db.datasets.selectors import items_of
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.exchange.tidy import tidy_csv
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.services import supersede_table
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_member, make_user
from tests.web.forms_sent import sent_by, wrong_at
from tests.web.study import Study
from tests.web.test_project import text_of

LIST = "/projects/oxidation/datasets/"
NEW = f"{LIST}new/"
MOST_QUERIES_OF_A_LIST = 5
HUGE = ["1e400", "9" * 400, "x" * 1_000_000]


@pytest.fixture
def tables(study: Study) -> list[ConcentrationTable]:
    """Of two runs at 25 and 35 degC."""
    study.run("K01")
    study.run("K02", kelvin=308.15)
    return list(ConcentrationTable.objects.order_by("run__code"))


def ids(tables: list[ConcentrationTable]) -> list[str]:
    return [str(table.pk) for table in tables]


def test_the_tables_that_are_ticked_are_frozen_in_the_order_of_their_runs(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    sent = sent_by(browser.get(NEW), name="both", tables=ids(tables)[::-1])
    response = browser.post(NEW, sent, follow=True)
    dataset = Dataset.objects.get()
    assert [item.table for item in items_of(dataset)] == tables
    text = text_of(response.content.decode())
    assert "both v1 is frozen" in text
    assert "K01 revision 1" in text and "K02 revision 1" in text
    assert "all times" in text
    assert "frozen by mira" in text and dataset.digest[:10] in text
    assert "current" in text and "stale" not in text


def test_the_same_choice_leads_to_the_dataset_that_is_there(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    sent = {"name": "both", "tables": ids(tables)}
    browser.post(NEW, sent)
    response = browser.post(NEW, sent, follow=True)
    assert "is both v1, which is here already" in text_of(response.content.decode())
    assert Dataset.objects.count() == 1


def test_the_filter_of_the_run_list_narrows_what_is_offered(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    html = browser.get(f"{NEW}?filter=35 degC").content.decode()
    assert "K02, table 1" in html and "K01, table 1" not in html


def test_looking_through_other_runs_keeps_what_is_ticked_and_typed(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    first, second = tables
    sent = {
        "name": "some",
        "tables": [str(first.pk)],
        f"t{first.pk}-start": "2",
        "filter": "35 degC",
        "show": "1",
    }
    response = browser.post(NEW, sent)
    assert response.status_code == 200
    again = sent_by(response)
    assert again["tables"] == [str(first.pk)]
    assert again[f"t{first.pk}-start"] == ["2"] and again["name"] == ["some"]
    assert f"t{second.pk}-start" in again
    assert not Dataset.objects.exists()


def test_all_that_the_filter_finds_can_be_taken_at_once(
    browser: Client, tables: list[ConcentrationTable], study: Study, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("kinetics_db.web.views.datasets.MOST_SHOWN", 1)
    response = browser.get(NEW)
    assert "2 tables match; the first 1 are shown" in text_of(response.content.decode())
    browser.post(NEW, sent_by(response, name="all", every="on"))
    assert [item.table for item in items_of(Dataset.objects.get())] == tables


def test_a_window_in_the_unit_of_the_table_is_kept_in_seconds(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    first = tables[0]
    page = browser.get(NEW)
    assert "0 to 20 min" in text_of(page.content.decode())
    changes = {
        "name": "part",
        "tables": ids(tables),
        f"t{first.pk}-start": "2.5",
        f"t{first.pk}-end": "15",
        f"t{first.pk}-leave": "ketone@3: air bubble\r\n\r\n alcohol@* : lamp: off\n",
    }
    response = browser.post(NEW, {**sent_by(page), **changes}, follow=True)
    window = Dataset.objects.get().content["items"][0]["window"]
    assert (window["start"], window["end"]) == (150, 900)
    assert window["left_out"] == {"ketone@3": "air bubble", "alcohol@*": "lamp: off"}
    assert Dataset.objects.get().content["items"][1]["window"]["start"] is None
    text = text_of(response.content.decode())
    assert "2.5 min to 15 min" in text
    assert "without ketone@3: air bubble" in text


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("start", "1,5", "write 1.5"),
        ("end", "ten", "is no number"),
        ("end", "<b>", "is no number"),
        ("leave", "ketone", "Line 1: write column@row: reason"),
        ("start", "a\x00", "Null characters"),
        *(("start", value, "number") for value in HUGE),
    ],
)
def test_a_window_that_cannot_be_read_is_told_at_its_field_and_nothing_is_lost(
    browser: Client, tables: list[ConcentrationTable], field: str, value: str, says: str
) -> None:
    name = f"t{tables[0].pk}-{field}"
    response = browser.post(NEW, {"name": "part", "tables": ids(tables), name: value})
    assert response.status_code == 422
    assert says in wrong_at(response, f"id_{name}")
    again = sent_by(response)
    assert again["tables"] == ids(tables) and again["name"] == ["part"]
    if "\x00" not in value:
        assert again[name] == [value]
    assert not Dataset.objects.exists()


@pytest.mark.parametrize(
    ("window", "says"),
    [
        ({"start": "99999"}, "leaves nothing"),
        ({"leave": "water@3: typo"}, "is no point"),
        ({"leave": "ketone@13: beyond"}, "is no point"),
        ({"leave": "ketone@3:"}, "without a reason"),
    ],
)
def test_what_the_service_refuses_of_a_window_stands_at_its_table(
    browser: Client, tables: list[ConcentrationTable], window: dict[str, str], says: str
) -> None:
    fields = {f"t{tables[1].pk}-{name}": value for name, value in window.items()}
    response = browser.post(NEW, {"name": "part", "tables": ids(tables), **fields})
    assert response.status_code == 422
    rows = response.context["found"].rows
    assert [bool(row.problems) for row in rows] == [False, True]
    assert says in rows[1].problems[0] and says in text_of(response.content.decode())


def test_a_window_of_a_table_that_is_not_taken_is_no_window_passed_over_in_silence(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    first, second = tables
    sent = {"name": "n", "tables": [str(first.pk)], f"t{second.pk}-start": "2"}
    response = browser.post(NEW, sent)
    assert response.status_code == 422
    assert "the table is not taken: tick it" in text_of(response.content.decode())
    browser.post(NEW, {**sent, "every": "on"})
    windows = [item["window"]["start"] for item in Dataset.objects.get().content["items"]]
    assert windows == [None, 120]


@pytest.mark.parametrize(
    ("sent", "field", "says"),
    [
        ({"name": ""}, "name", "needs a name"),
        ({"name": "x" * 1_000_000}, "name", "120"),
        ({"name": "a\x00"}, "name", "Null characters"),
        ({"name": "n", "filter": "bananas <b>"}, "filter", "bananas"),
        ({"name": "n", "filter": "x" * 1_000_000}, "filter", ""),
    ],
)
def test_a_name_or_filter_that_cannot_be_used_is_told_there(
    browser: Client, tables: list[ConcentrationTable], sent: dict[str, str], field: str, says: str
) -> None:
    response = browser.post(NEW, {"tables": ids(tables), **sent})
    assert response.status_code == 422
    assert wrong_at(response, f"id_{field}") and says in wrong_at(response, f"id_{field}")
    assert sent_by(response)["tables"] == ids(tables)
    assert "<b>" not in response.content.decode().partition("<main")[2].replace("<b>mira", "")
    assert not Dataset.objects.exists()


def test_a_filter_in_the_address_that_cannot_be_read_is_explained(
    browser: Client, tables: list[ConcentrationTable]
) -> None:
    response = browser.get(f"{NEW}?filter=bananas %3Cb%3E")
    assert response.status_code == 200
    assert wrong_at(response, "id_filter")


@pytest.mark.parametrize("chosen", [[], ["999999"], ["x"], ["9" * 18], ["9" * 400]])
def test_a_choice_of_nothing_or_of_tables_that_are_not_here_is_refused(
    browser: Client, tables: list[ConcentrationTable], chosen: list[str]
) -> None:
    response = browser.post(NEW, {"name": "n", "tables": chosen})
    assert response.status_code == 422
    assert "table" in text_of(response.content.decode()).lower()
    assert not Dataset.objects.exists()


def test_tables_in_mol_per_litre_and_in_percent_are_not_mixed(
    browser: Client, tables: list[ConcentrationTable], study: Study
) -> None:
    run = make_run(study.user, study.project.pk, "R1", {"ester": Amount(100.0, "%")})
    text = lines(("time / min", "ester / %"), (0, 100.0), (10, 60.5), (20, 36.1))
    relative = make_reported_table(study.user, run, text, {"ester": "ester"}, constant_u=1.0)
    response = browser.post(NEW, {"name": "mixed", "tables": [*ids(tables), str(relative.pk)]})
    assert response.status_code == 422
    assert "are mixed" in text_of(response.content.decode())
    assert not Dataset.objects.exists()


def test_superseded_tables_are_not_offered_and_make_a_dataset_stale(
    browser: Client, tables: list[ConcentrationTable], study: Study
) -> None:
    dataset = study.dataset()
    newer = study.table(Run.objects.get(code="K01"), k=2.1e-3, name="again.txt")
    supersede_table(user=study.user, older=tables[0], newer=newer, reason="phase was wrong")
    html = browser.get(NEW).content.decode()
    assert f'name="tables" value="{newer.pk}"' in html
    assert f'name="tables" value="{tables[0].pk}"' not in html
    text = text_of(browser.get(f"/datasets/{dataset.pk}/").content.decode())
    assert "table 1 of run K01 has been superseded" in text
    assert "superseded since" in text
    assert "stale" in text_of(browser.get(LIST).content.decode()).partition("frozen choice")[2]


def test_the_page_shows_the_fits_on_it(browser: Client, fitted: Study) -> None:
    dataset = Dataset.objects.get()
    html = browser.get(f"/datasets/{dataset.pk}/").content.decode()
    assert "first order v1 converged agrees 2" in text_of(html)
    assert "second order v1" in text_of(html)
    assert f'href="/projects/oxidation/fits/new/?dataset={dataset.pk}"' in html


def test_the_file_has_every_value_of_the_dataset(browser: Client, fitted: Study) -> None:
    dataset = Dataset.objects.get()
    response = browser.get(f"/datasets/{dataset.pk}.csv")
    text = b"".join(response.streaming_content).decode()  # type: ignore[attr-defined]
    assert text == tidy_csv(user=fitted.user, dataset_id=dataset.pk)
    assert len(list(csv.reader(io.StringIO(text)))) == 1 + 2 * 2 * 13
    assert response["Content-Disposition"] == f'attachment; filename="dataset-{dataset.pk}.csv"'


def test_the_list_takes_few_queries_however_long_it_is(
    browser: Client, tables: list[ConcentrationTable], study: Study
) -> None:
    browser.get(LIST)
    for number in range(55):
        freeze_dataset(
            user=study.user, project_id=study.project.pk, name=f"set {number:02}", table_ids=[tables[0].pk]
        )
    with CaptureQueriesContext(connection) as queries:
        response = browser.get(LIST)
    assert len(queries) <= MOST_QUERIES_OF_A_LIST, [q["sql"][:120] for q in queries]
    assert "set 54" in response.content.decode() and "set 04" not in response.content.decode()
    assert "set 04" in browser.get(f"{LIST}?cursor={response.context['page'].next}").content.decode()


def test_the_choice_takes_the_same_queries_for_many_tables(browser: Client, study: Study) -> None:
    counts = []
    for codes in (("K01",), ("K02", "K03", "K04")):
        for code in codes:
            study.run(code)
        with CaptureQueriesContext(connection) as queries:
            browser.get(NEW)
        counts.append(len(queries))
    assert counts[0] == counts[1] <= 6


def test_an_empty_project_says_what_to_do_first(browser: Client, study: Study) -> None:
    assert "choose some and freeze them" in text_of(browser.get(LIST).content.decode())
    assert "First give a run its instrument file" in text_of(browser.get(NEW).content.decode())


def test_readers_look_and_strangers_do_not(
    client: Client, tables: list[ConcentrationTable], study: Study
) -> None:
    dataset = study.dataset()
    addresses = [LIST, NEW, f"/datasets/{dataset.pk}/", f"/datasets/{dataset.pk}.csv"]
    for address in addresses:
        assert client.get(address)["Location"].startswith("/login/")
    client.force_login(make_user("stranger"))
    for address in [*addresses, "/datasets/999999999999999999999999/"]:
        assert client.get(address).status_code == 404
    client.force_login(make_member(study.project, "reader", "rhea"))
    for address in (addresses[0], addresses[2]):
        html = client.get(address).content.decode()
        assert "datasets/new/" not in html and "fits/new/" not in html
    assert client.get(addresses[3]).status_code == 200
    assert client.get(NEW).status_code == 403
    assert client.post(NEW, {"name": "n", "tables": ids(tables)}).status_code == 403
    assert Dataset.objects.count() == 1
