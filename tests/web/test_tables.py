"""One concentration table on its page, as CSV, and replaced by a newer one."""

from __future__ import annotations

import csv
import io
from typing import Any

import numpy as np
import pytest
from django.test import Client
from django.urls import reverse

from kinetics_db.engine.reading import read
from kinetics_db.exchange.tables import csv_pieces, table_columns, table_csv
from kinetics_db.measurements.models import ConcentrationTable, TableSupersession
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.runs.entry import Amount
from tests.factories.flow import make_reported_table, make_run
from tests.factories.people import make_member, make_user
from tests.web.study import Study


@pytest.fixture
def table(study: Study) -> ConcentrationTable:
    study.run("K01")
    return ConcentrationTable.objects.get()


def page(table: ConcentrationTable) -> str:
    return reverse("web:table", args=[table.pk])


def downloaded(browser: Client, table: ConcentrationTable) -> str:
    response = browser.get(reverse("web:table-csv", args=[table.pk]))
    assert response["Content-Type"].startswith("text/csv")
    return b"".join(response.streaming_content).decode()  # type: ignore[attr-defined]


def test_a_table_shows_its_numbers_its_errors_and_where_they_come_from(
    browser: Client, table: ConcentrationTable
) -> None:
    response = browser.get(page(table))
    text = response.content.decode()
    assert response.status_code == 200
    assert "Run K01, table 1" in text and '<figure class="chart"' in text
    assert "standard: 0.2 % on all values of alcohol and ketone together" in text
    assert "nmr.txt" in text and table.signal_table.file.stored.sha256 in text
    assert "against the standard v1" in text and "by mira" in text
    assert "No dataset holds this table yet" in text
    assert text.count("<h1") == 1


def test_datasets_and_fits_that_use_a_table_are_named(browser: Client, fitted: Study) -> None:
    table = ConcentrationTable.objects.order_by("pk").first()
    assert table is not None
    text = browser.get(page(table)).content.decode()
    assert "dataset &#x27;all&#x27;, version 1" in text
    assert "first order" in text and "second order" in text


def test_csv_has_every_digit_and_reads_back_as_the_same_numbers(
    browser: Client, table: ConcentrationTable
) -> None:
    text = downloaded(browser, table)
    rows = list(csv.reader(io.StringIO(text)))
    assert rows[0] == [
        "time / s",
        "alcohol / (mol/L)",
        "u(alcohol) / (mol/L)",
        "ketone / (mol/L)",
        "u(ketone) / (mol/L)",
    ]
    read_back = read(text.encode()).table
    numbers = table.table
    np.testing.assert_array_equal(read_back.times, numbers.times)
    for name in ("alcohol", "ketone"):
        np.testing.assert_array_equal(read_back.column(name, "signal"), numbers.column(name, "concentration"))
        spread = numbers.column(name, "standard uncertainty")
        np.testing.assert_array_equal(read_back.column(f"u({name})", "signal"), spread)


def test_csv_leaves_missing_values_empty_and_disarms_formulas(browser: Client, study: Study) -> None:
    run = make_run(study.user, study.project.pk, "K02", {"A": Amount(1.0, "mM")})
    table = make_reported_table(study.user, run, "t / s,A / mM\n0,1\n1,n.d.\n", {"A": '=cmd|"x",1'})
    rows = list(csv.reader(io.StringIO(downloaded(browser, table))))
    assert rows[0][1] == '\'=cmd|"x",1 / (mol/L)'
    assert rows[2] == ["1.0", "", ""]


def test_a_long_table_comes_in_pieces(study: Study) -> None:
    run = make_run(study.user, study.project.pk, "K02", {"A": Amount(1.0, "mM")})
    text = "t / s,A / mM\n" + "".join(f"{i},{i}\n" for i in range(2500))
    table = make_reported_table(study.user, run, text, {"A": "A"})
    pieces = list(table_csv(user=study.user, table_id=table.pk))
    assert len(pieces) == 3 and "".join(pieces).count("\r\n") == 2501
    assert "".join(csv_pieces(table_columns(table.table))) == "".join(pieces)


def test_a_browser_that_has_the_csv_is_not_sent_it_again(browser: Client, table: ConcentrationTable) -> None:
    where = reverse("web:table-csv", args=[table.pk])
    first = browser.get(where)
    assert first["Content-Disposition"] == 'attachment; filename="K01-table-1.csv"'
    assert browser.get(where, headers={"If-None-Match": first["ETag"]}).status_code == 304


def newer_than(study: Study, table: ConcentrationTable) -> ConcentrationTable:
    recipe = table.reduction.content | {"noise_relative": 0.01}
    return reduce_signals(
        user=study.user, signal_table=table.signal_table, name="with relative noise", recipe=recipe
    )


def test_a_newer_table_replaces_an_older_one_for_a_reason(
    browser: Client, study: Study, table: ConcentrationTable
) -> None:
    newer = newer_than(study, table)
    where = reverse("web:supersede-table", args=[table.pk])
    assert where in browser.get(page(table)).content.decode()
    response = browser.post(where, {"newer": str(newer.pk), "reason": "noise was <too> small"})
    assert response["Location"] == page(table)
    assert TableSupersession.objects.get().newer_id == newer.pk
    text = browser.get(page(table)).content.decode()
    assert "superseded" in text and page(newer) in text and "noise was &lt;too&gt; small" in text
    again = browser.post(where, {"newer": str(newer.pk), "reason": "once more"})
    assert again.status_code == 422 and "superseded already" in again.content.decode()


@pytest.mark.parametrize(
    ("sent", "field"),
    [
        ({}, "newer"),
        ({"newer": "999999", "reason": "x"}, "newer"),
        ({"newer": "x" * 100_000, "reason": "x"}, "newer"),
        ({"reason": ""}, "reason"),
        ({"reason": "x" * 1001}, "reason"),
        ({"reason": "a\x00b"}, "reason"),
    ],
)
def test_a_replacement_without_table_or_reason_comes_back_to_be_corrected(
    browser: Client, study: Study, table: ConcentrationTable, sent: dict[str, str], field: str
) -> None:
    newer = newer_than(study, table)
    given = sent if field == "newer" else {"newer": str(newer.pk), **sent}
    response = browser.post(reverse("web:supersede-table", args=[table.pk]), given)
    assert response.status_code == 422 and response.context["form"].errors[field]
    assert not TableSupersession.objects.exists()


def test_a_table_without_a_later_one_says_what_to_do_first(
    browser: Client, table: ConcentrationTable
) -> None:
    text = browser.get(reverse("web:supersede-table", args=[table.pk])).content.decode()
    assert "has no later table" in text and reverse("web:reduce", args=[table.signal_table_id]) in text


def test_readers_see_tables_without_buttons_and_strangers_find_nothing(
    study: Study, table: ConcentrationTable
) -> None:
    newer = newer_than(study, table)
    replace = reverse("web:supersede-table", args=[table.pk])
    client = Client()
    client.force_login(make_member(study.project, "reader"))
    response = client.get(page(table))
    assert response.status_code == 200 and replace not in response.content.decode()
    assert client.get(replace).status_code == 403
    assert client.post(replace, {"newer": str(newer.pk), "reason": "x"}).status_code == 403
    client.force_login(make_user("nobody"))
    for where in (page(table), replace, reverse("web:table-csv", args=[table.pk])):
        assert client.get(where).status_code == 404
    client.logout()
    assert client.get(page(table))["Location"].startswith("/login/")
    assert not TableSupersession.objects.exists()


def test_a_table_page_asks_little_of_the_database(
    browser: Client, fitted: Study, django_assert_max_num_queries: Any
) -> None:
    table = ConcentrationTable.objects.order_by("pk").first()
    assert table is not None
    browser.get(page(table))
    with django_assert_max_num_queries(9):
        browser.get(page(table))


def test_percent_is_shown_as_such(browser: Client, study: Study) -> None:
    run = make_run(study.user, study.project.pk, "K02", {"A": Amount(1.0, "mM")})
    data = b"t / min,conversion / %\n0,0\n5,50\n10,75\n"
    signals = store_file(user=study.user, run=run, name="gc.csv", data=data)
    recipe = {"kind": "as reported", "columns": [{"signal": "conversion", "species": "product"}]}
    table = reduce_signals(user=study.user, signal_table=signals, name="gc", recipe=recipe)
    text = browser.get(page(table)).content.decode()
    assert "in percent" in text and "product / %" in text
    assert "Without an uncertainty: product" in text
