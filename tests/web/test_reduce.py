"""Signals to concentrations on pages."""

from __future__ import annotations

import re
from typing import Any

import pytest
from django.test import Client
from django.urls import reverse

from kinetics_db.measurements.models import ConcentrationTable, Reduction, SignalTable
from kinetics_db.measurements.services import store_file
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_member, make_user
from tests.web.study import Study

NMR = b"t / min;I(A) / a.u.;I(B) / a.u.;I(std) / a.u.\n0;9,0;0,5;12,0\n1;4,5;4,5;12,0\n2;;7,0;12,0\n"
HPLC = b"t / min,A / mM,u / mM,y / %\n0,10,0.1,0\n1,5,0.1,50\n2,2,0.1,80\n"
STANDARD = {
    "kind": "internal standard", "name": "against the standard", "standard_signal": "I(std)",
    "standard_species": "dioxane", "standard_nuclei": "8", "standard_concentration": "20", "standard_unit": "mM",
    "standard_relative_u": "1 %", "standard_owner": "stock S", "noise_absolute": "0.05",
    "row-0-species": "A", "row-0-nuclei": "2", "row-1-species": "B", "row-1-nuclei": "1",
    "row-1-response_factor": "1.1", "row-1-response_relative_u": "0.02",
}  # fmt: skip
REPORTED = {"kind": "as reported", "name": "as is", "constant_u": "0.2", "row-0-species": "A"}


@pytest.fixture
def run(study: Study) -> Run:
    return make_run(
        study.user, study.project.pk, "K07", {"A": Amount(30.0, "mM"), "<cat>": Amount(1.0, "mM")}
    )


@pytest.fixture
def nmr(study: Study, run: Run) -> SignalTable:
    return store_file(user=study.user, run=run, name="nmr.csv", data=NMR)


@pytest.fixture
def hplc(study: Study, run: Run) -> SignalTable:
    return store_file(user=study.user, run=run, name="hplc.csv", data=HPLC)


def address(signals: SignalTable) -> str:
    return reverse("web:reduce", args=[signals.pk])


def test_the_page_of_signals_shows_how_they_were_read_and_what_to_do_next(
    browser: Client, nmr: SignalTable
) -> None:
    response = browser.get(reverse("web:signals", args=[nmr.pk]))
    text = response.content.decode()
    assert response.status_code == 200
    assert "decimal sign: comma" in text and "I(std) / a.u." in text and "None yet" in text
    assert f'href="{address(nmr)}"' in text and '<figure class="chart"' in text
    csv = browser.get(reverse("web:signals-csv", args=[nmr.pk]))
    assert b"".join(csv.streaming_content).decode().splitlines()[:2] == [
        "t / s,I(A) / a.u.,I(B) / a.u.,I(std) / a.u.",
        "0.0,9.0,0.5,12.0",
    ]


def test_readers_see_signals_without_buttons_and_may_not_reduce(study: Study, nmr: SignalTable) -> None:
    client = Client()
    client.force_login(make_member(study.project, "reader"))
    assert address(nmr) not in client.get(reverse("web:signals", args=[nmr.pk])).content.decode()
    assert client.get(address(nmr)).status_code == 403
    assert client.post(address(nmr), STANDARD | {"do": "store"}).status_code == 403
    client.force_login(make_user("nobody"))
    for where in (
        address(nmr),
        *(reverse(f"web:{name}", args=[nmr.pk]) for name in ("signals", "signals-csv")),
    ):
        assert client.get(where).status_code == 404
    assert client.post(address(nmr), STANDARD | {"do": "store"}).status_code == 404
    assert not ConcentrationTable.objects.exists()


def test_the_likely_kind_of_recipe_is_shown_first(
    browser: Client, nmr: SignalTable, hplc: SignalTable
) -> None:
    assert browser.get(address(nmr)).context["forms"].kind == "internal standard"
    assert browser.get(address(hplc)).context["forms"].kind == "as reported"
    assert (
        browser.get(address(hplc), {"kind": "internal standard"}).context["forms"].kind == "internal standard"
    )
    wrong = browser.get(address(hplc), {"kind": "<b>"})
    assert wrong.status_code == 400 and "<b>" not in wrong.content.decode().replace("&lt;b&gt;", "")


def test_names_of_the_runs_compounds_are_offered(browser: Client, nmr: SignalTable) -> None:
    text = browser.get(address(nmr)).content.decode()
    assert '<option value="A"></option>' in text and '<option value="&lt;cat&gt;"></option>' in text


def test_what_a_recipe_gives_is_shown_before_it_is_stored(browser: Client, nmr: SignalTable) -> None:
    entries = AuditEntry.objects.count()
    response = browser.post(address(nmr), STANDARD | {"do": "preview"})
    text = response.content.decode()
    assert response.status_code == 200, response.context["form"].errors
    # 20 mM * (9/2) / (12/8) = 60 mM
    assert "60.00(42)" in text and "–" in text
    assert "stock S: 1 % on all values of A and B together" in text
    assert "response factor of B: 2 % on all values of B" in text
    assert not ConcentrationTable.objects.exists() and AuditEntry.objects.count() == entries
    part = browser.post(address(nmr), STANDARD | {"do": "preview"}, headers={"HX-Request": "true"})
    assert part.content.decode().lstrip().startswith('<div id="reducing">')


def test_concentrations_against_a_standard_are_stored_as_filled_in(browser: Client, nmr: SignalTable) -> None:
    response = browser.post(address(nmr), STANDARD | {"do": "store"})
    table = ConcentrationTable.objects.get()
    assert response["Location"] == reverse("web:table", args=[table.pk])
    recipe = table.reduction.content
    assert recipe["standard_concentration"] == pytest.approx(0.02)
    assert recipe["standard_relative_u"] == pytest.approx(0.01) and recipe["draws"] == 20_000
    assert [s["species"] for s in recipe["signals"]] == ["A", "B"]
    assert table.table.column("A", "concentration")[0] == pytest.approx(0.06)


def test_values_as_reported_are_stored_with_uncertainties_of_a_column(
    browser: Client, hplc: SignalTable
) -> None:
    sent = {"kind": "as reported", "name": "as is", "row-0-species": "A", "row-0-uncertainty_signal": "u"}
    browser.post(address(hplc), sent | {"do": "store"})
    table = ConcentrationTable.objects.get().table
    assert table.column("A", "standard uncertainty").tolist() == pytest.approx([1e-4] * 3)


def test_the_newest_recipe_with_matching_signals_fills_the_form(
    browser: Client, study: Study, nmr: SignalTable
) -> None:
    browser.post(address(nmr), STANDARD | {"do": "store"})
    other = make_run(study.user, study.project.pk, "K08", {"A": Amount(30.0, "mM")})
    again = store_file(user=study.user, run=other, name="nmr.csv", data=NMR)
    response = browser.get(address(again))
    assert "Filled as for K07: 'against the standard' v1" in response.content.decode()
    form = response.context["form"]
    sent = {"kind": "internal standard", "do": "store"}
    for bound in (*form, *(field for _, row in response.context["forms"].rows for field in row)):
        sent[bound.html_name] = bound.value() or ""
    browser.post(address(again), sent)
    assert Reduction.objects.count() == 1 and ConcentrationTable.objects.count() == 2
    empty = browser.get(address(again), {"like": "none"})
    assert empty.context["like"] is None and not empty.context["form"]["standard_signal"].value()


@pytest.mark.parametrize(
    ("changes", "field", "says"),
    [
        ({"name": ""}, "name", "needs a name"),
        ({"name": "x" * 121}, "name", "at most 120"),
        ({"name": "a\x00b"}, "name", "null characters"),
        ({"standard_concentration": ""}, "standard_concentration", "not stated"),
        ({"standard_concentration": "20,5"}, "standard_concentration", "write 20.5"),
        ({"standard_concentration": "1e400"}, "standard_concentration", "too large"),
        ({"standard_concentration": "-1"}, "standard_concentration", "above 0"),
        ({"standard_concentration": "9" * 1_000_000}, "standard_concentration", "at most 200"),
        ({"standard_unit": "parsec"}, "standard_unit", "write mol/l or mm"),
        ({"standard_unit": "min"}, "standard_unit", "no unit of concentration"),
        ({"standard_relative_u": "<b>"}, "standard_relative_u", "0.01, or 1 %"),
        ({"standard_signal": ""}, "standard_signal", "not stated"),
        ({"standard_signal": "I(X)"}, "standard_signal", "there is no signal"),
        ({"standard_species": ""}, "standard_species", "not stated"),
        ({"standard_nuclei": "0"}, "standard_nuclei", "above 0"),
        ({"standard_species": "A"}, "standard_species", "stands twice"),
        ({"noise_absolute": ""}, "noise_absolute", "cannot be estimated"),
        ({"noise_absolute": "0"}, "noise_absolute", "a noise of zero"),
        ({"repetition_time": "5"}, "standard_t1", "t1 of"),
        ({"flip_angle": "180"}, "flip_angle", "between 0 and 180"),
        ({"draws": "10"}, "draws", "from 1000"),
        ({"draws": "1500.5"}, "draws", "is no int"),
        ({"seed": "-1"}, "seed", "a whole number"),
    ],
)
def test_a_wrong_entry_of_the_recipe_stands_at_its_field_with_what_was_typed(
    browser: Client, nmr: SignalTable, changes: dict[str, str], field: str, says: str
) -> None:
    response = browser.post(address(nmr), STANDARD | changes | {"do": "store"})
    form = response.context["form"]
    assert response.status_code == 422
    assert says in str(form.errors.get(field, "")).lower(), (
        form.errors,
        response.context["forms"].row_problems,
    )
    for name, value in changes.items():
        assert form[name].value() == value
    assert not ConcentrationTable.objects.exists()


@pytest.mark.parametrize(
    ("changes", "field", "says"),
    [
        ({"row-1-nuclei": ""}, "nuclei", "not stated"),
        ({"row-1-nuclei": "two"}, "nuclei", "is no number"),
        ({"row-1-response_factor": "0"}, "response_factor", "above 0"),
        ({"row-1-species": "A"}, "species", "stands twice"),
        ({"row-1-species": "x" * 200}, "species", "at most 120"),
        ({"row-1-noise": "-1"}, "noise", "above 0"),
        ({"repetition_time": "5", "standard_t1": "2", "row-0-t1": "2"}, "t1", "not stated"),
    ],
)
def test_a_wrong_entry_of_a_signal_stands_in_its_row(
    browser: Client, nmr: SignalTable, changes: dict[str, str], field: str, says: str
) -> None:
    response = browser.post(address(nmr), STANDARD | changes | {"do": "store"})
    row = response.context["forms"].rows[1][1]
    assert response.status_code == 422
    assert says in str(row.errors.get(field, "")).lower(), (
        row.errors,
        response.context["forms"].row_problems,
    )
    assert not ConcentrationTable.objects.exists()


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"row-0-species": ""}, "no column is to be taken"),
        ({"row-2-species": "y"}, "of different kinds"),
        ({"row-0-unit": "min"}, "which is no concentration"),
        ({"row-0-unit": "foo^^"}, "unknown unit"),
        ({"row-0-uncertainty_signal": "nowhere"}, "there is no signal"),
        (
            {"constant_u": "", "relative_u": "0.1", "row-2-species": "y", "row-0-species": ""},
            "relative uncertainty is zero",
        ),
        ({"relative_u": "x"}, "is no number"),
        ({"scale_relative_u": "-1"}, "0 or more"),
    ],
)  # fmt: skip
def test_a_wrong_entry_of_reported_columns_is_said_on_the_page(
    browser: Client, hplc: SignalTable, changes: dict[str, str], says: str
) -> None:
    response = browser.post(address(hplc), REPORTED | changes | {"do": "store"})
    assert response.status_code == 422
    assert says in response.content.decode().lower()
    assert not ConcentrationTable.objects.exists()


def test_a_recipe_of_an_unknown_kind_is_refused_in_words(browser: Client, nmr: SignalTable) -> None:
    for kind in ("", "by feel", "x" * 100_000):
        response = browser.post(address(nmr), {"kind": kind, "do": "store"})
        assert response.status_code == 422 and "there is no recipe" in response.content.decode().lower()


def test_markup_in_names_is_shown_as_text(browser: Client, nmr: SignalTable) -> None:
    hostile = {"row-0-species": "<img src=x>", "standard_owner": "<script>alert(1)</script>"}
    response = browser.post(address(nmr), STANDARD | hostile | {"do": "preview"})
    text = response.content.decode()
    assert response.status_code == 200
    assert "<img src=x>" not in re.sub(r"\\u003C", "", text) and "<script>alert" not in text


def test_a_table_with_very_many_signals_says_how_to_make_it_smaller(
    browser: Client, study: Study, run: Run
) -> None:
    names = ",".join(f"p{i} / mM" for i in range(80))
    data = f"t / s,{names}\n0,{','.join('1' * 80)}\n1,{','.join('2' * 80)}\n"
    signals = store_file(user=study.user, run=run, name="many.csv", data=data.encode())
    response = browser.get(address(signals))
    assert "20 more signals have no row here" in response.content.decode()
    assert len(response.content) < 500_000


def test_the_form_asks_little_of_the_database(
    browser: Client, nmr: SignalTable, django_assert_max_num_queries: Any
) -> None:
    browser.get(address(nmr))
    with django_assert_max_num_queries(9):
        browser.get(address(nmr))


def test_while_a_recipe_is_filled_in_what_is_open_is_named_and_not_called_wrong(
    browser: Client, nmr: SignalTable
) -> None:
    begun = {"kind": "internal standard", "do": "preview", "standard_signal": "I(std)", "name": "x"}
    live = {"HX-Request": "true"}
    response = browser.post(address(nmr), begun, headers=live)
    text = response.content.decode()
    assert response.status_code == 200 and "Still open" in text and "Concentration in the vessel" in text
    assert 'class="wrong"' not in text
    row = browser.post(address(nmr), STANDARD | {"row-1-nuclei": "", "do": "preview"}, headers=live)
    assert row.context["forms"].open == ["nuclei of I(B)"]
    wrong = browser.post(address(nmr), begun | {"standard_concentration": "2,0"}, headers=live)
    assert "write 2.0" in str(wrong.context["form"].errors["standard_concentration"])


def test_a_form_that_was_sent_by_its_button_says_at_the_field_what_is_missing(
    browser: Client, nmr: SignalTable
) -> None:
    response = browser.post(address(nmr), {"kind": "internal standard", "do": "preview", "name": "x"})
    assert response.status_code == 422
    assert response.context["form"].errors["standard_concentration"] == ["It is not stated yet"]
