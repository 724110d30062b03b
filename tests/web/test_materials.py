"""The materials page and its forms."""

from __future__ import annotations

import re
from html import unescape

import pytest
from django.db import connection
from django.http import HttpResponse
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.materials.models import Compound, CompoundRevision, LotRevision, Stock, StockRevision
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from tests.factories.people import make_member, make_user
from tests.web.study import Study

LIST = "/projects/oxidation/materials/"
COMPOUND, LOT, STOCK = (f"{LIST}{kind}/new/" for kind in ("compounds", "lots", "stocks"))
SALT = {
    "name": "salt",
    "formula": "NaCl",
    "molar_mass": "58.44",
    "density_value": "2.16",
    "density_unit": "g/mL",
}
BOTTLE = {"code": "S-1", "compound": "salt", "purity": "0.99", "purity_uncertainty": "0.002"}
FLASK = {
    "code": "F1",
    "volume_value": "10",
    "volume_unit": "mL",
    "volume_uncertainty": "0.02",
    "solvent": "water",
    "made_on": "2026-03-05",
    "temperature": "20",
    "portions-1-kind": "lot",
    "portions-1-source": "S-1",
    "portions-1-amount": "58.44",
    "portions-1-unit": "mg",
    "portions-1-uncertainty": "0.1",
}


@pytest.fixture
def shelf(study: Study) -> Study:
    """A compound and a lot of it."""
    where = {"user": study.user, "project_id": study.project.pk}
    enter_compound(**where, name="salt", molar_mass=58.44)
    enter_lot(**where, code="S-1", compound="salt", purity=0.99, purity_uncertainty=0.002)
    return study


def text_of(response: HttpResponse) -> str:
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", response.content.decode())).split())


def wrong_at(response: HttpResponse, field: str) -> str:
    html = response.content.decode()
    found = re.search(
        rf'<(?:ul class="wrong"|li) id="id_{re.escape(field)}_error">(.*?)</(?:ul|li)>', html, re.S
    )
    assert found is not None, re.findall(r'class="wrong".*?</', html, re.S)
    return unescape(re.sub(r"<[^>]+>", "", found[1]))


def test_a_compound_is_entered_and_listed(browser: Client, study: Study) -> None:
    sent = {**SALT, "hazard_statements": "H319 <eyes>\r\n\r\nH315"}
    response = browser.post(COMPOUND, sent, follow=True)
    text = text_of(response)
    assert "Compound salt is stored (r1)." in text
    assert "salt NaCl 58.44 g/mol 2.16 g/mL H319 <eyes>, H315 r1, mira" in text
    content = CompoundRevision.objects.get().content
    assert (content["molar_mass"], content["density"]) == (58.44, 2160.0)
    assert content["hazard_statements"] == ["H319 <eyes>", "H315"]


def test_a_compound_without_a_molar_mass_says_what_follows(browser: Client, study: Study) -> None:
    assert "can be charged by amount (mmol) or concentration, not by mass" in text_of(browser.get(COMPOUND))
    response = browser.post(COMPOUND, {"name": "unknown"}, follow=True)
    assert "not known: cannot be charged by mass" in text_of(response)


def test_a_lot_is_entered_with_its_purity_as_a_fraction_or_in_percent(browser: Client, shelf: Study) -> None:
    browser.post(LOT, {**BOTTLE, "code": "S-2", "purity": "98.5 %", "purity_uncertainty": "0.5%"})
    content = LotRevision.objects.get(lot__code="S-2").content
    assert (content["purity"], content["purity_u"]) == (pytest.approx(0.985), pytest.approx(0.005))
    assert "S-1 salt 0.9900(20)" in text_of(browser.get(LIST))


def test_a_stock_is_made_up_from_portions(browser: Client, shelf: Study) -> None:
    response = browser.post(STOCK, FLASK, follow=True)
    assert "Stock F1 is stored (r1)." in text_of(response)
    content = StockRevision.objects.get().content
    assert content["components"][0]["concentration"] == pytest.approx(0.099)
    assert content["temperature"] == 293.15
    assert re.search(r"F1 salt 99\.\d+\(\d+\) mmol/L water 2026-03-05", text_of(response))


def test_revising_begins_with_the_newest_revision_and_keeps_the_name(browser: Client, shelf: Study) -> None:
    browser.post(STOCK, FLASK)
    for address, name in ((COMPOUND, "salt"), (LOT, "S-1"), (STOCK, "F1")):
        html = browser.get(address, {"revise": name}).content.decode()
        sent = {
            field: unescape(value)
            for field, value in re.findall(r'<input type="text" name="([^"]+)"(?: value="([^"]*)")?', html)
        }
        sent |= {"portions-1-kind": "lot", "volume_unit": "mL"}
        unchanged = browser.post(f"{address}?revise={name}", sent, follow=True)
        assert "is stored (r1)" in text_of(unchanged)
        named = "name" if address == COMPOUND else "code"
        renamed = browser.post(f"{address}?revise={name}", {**sent, named: "other"})
        assert renamed.status_code == 422
        assert f"keeps its {named}" in wrong_at(renamed, named)


def test_a_revision_is_stored_with_its_reason(browser: Client, shelf: Study) -> None:
    response = browser.post(
        f"{COMPOUND}?revise=salt", {"name": "salt", "molar_mass": "58.5", "reason": "misread"}
    )
    assert response.status_code == 302
    newest = CompoundRevision.objects.get(number=2)
    assert (newest.content["molar_mass"], newest.reason) == (58.5, "misread")
    words = text_of(browser.get(f"{COMPOUND}?revise=salt"))
    assert "Lots that were entered before keep the molar mass" in words


def test_a_new_form_does_not_revise_what_is_there(browser: Client, shelf: Study) -> None:
    browser.post(STOCK, FLASK)
    for address, sent in ((COMPOUND, SALT), (LOT, BOTTLE), (STOCK, FLASK)):
        response = browser.post(address, sent)
        assert response.status_code == 422
        assert "already (another, or revise that one" in wrong_at(
            response, "name" if address == COMPOUND else "code"
        )
    assert CompoundRevision.objects.count() == 1


@pytest.mark.parametrize("address", [COMPOUND, LOT, STOCK])
@pytest.mark.parametrize("name", ["nothing", "x" * 5000, "a\x00b", "<b>"])
def test_what_is_not_there_cannot_be_revised(browser: Client, shelf: Study, address: str, name: str) -> None:
    assert browser.get(address, {"revise": name}).status_code == 404


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("name", "", "needs a name"),
        ("name", "x" * 81, "81 characters are too many"),
        ("name", "a\x07b", "cannot be stored"),
        ("name", "a\x00b", "null characters"),
        ("formula", "<script>" * 200_000, "characters are too many"),
        ("molar_mass", "1e400", "too large for a number"),
        ("molar_mass", "58,44", "'58,44' is no number (write 58.44)"),
        ("molar_mass", "-3", "above 0 g/mol"),
        ("molar_mass", "0", "above 0 g/mol"),
        ("density_value", "thick", "'thick' is no number"),
        ("density_value", "0", "above 0 g/L"),
        ("density_unit", "", "a unit is missing"),
        ("density_unit", "g", "cannot become"),
        ("density_unit", "stone/pint", "unknown unit"),
        ("hazard_statements", "H" * 201, "201 characters are too many"),
    ],
)
def test_a_wrong_compound_comes_back_at_its_field(
    browser: Client, study: Study, field: str, value: str, says: str
) -> None:
    response = browser.post(COMPOUND, {**SALT, field: value})
    assert response.status_code == 422
    assert says.lower() in wrong_at(response, field).lower()
    assert Compound.objects.count() == 0
    kept = unescape(response.content.decode())
    assert "NaCl" in kept or field == "formula"
    assert "<script><script>" not in response.content.decode()


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("code", "", "needs a code"),
        ("compound", "sugar <b>", "no compound 'sugar <b>'"),
        ("compound", "", "no compound ''"),
        ("purity", "98", "98 % is 0.98"),
        ("purity", "pure", "'pure' is no number"),
        ("purity", "1e400 %", "too large"),
        ("purity", "%", "a number is missing"),
        ("purity_uncertainty", "-0.1", "0 or more"),
        ("supplier_note", "x" * 1001, "1001 characters are too many"),
    ],
)
def test_a_wrong_lot_comes_back_at_its_field(
    browser: Client, shelf: Study, field: str, value: str, says: str
) -> None:
    response = browser.post(LOT, {**BOTTLE, "code": "S-3", field: value})
    assert response.status_code == 422
    assert says.lower() in wrong_at(response, field).lower()
    assert LotRevision.objects.count() == 1


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("code", "", "needs a code"),
        ("volume_value", "", "a number is missing"),
        ("volume_value", "-1", "a volume above 0 L"),
        ("volume_unit", "mg", "cannot become"),
        ("volume_unit", "", "a unit is missing"),
        ("volume_uncertainty", "x", "'x' is no number"),
        ("made_on", "in March", "'in March' is no date"),
        ("temperature", "1e999", "too large"),
        ("temperature", "-300", "above 0 K"),
        ("portions-1-source", "S-9", "no lot 'S-9'"),
        ("portions-1-source", "", "what went in is not named"),
        ("portions-1-source", "a\x00b", "null characters"),
        ("portions-1-kind", "stock", "is no kind of source"),
        ("portions-1-amount", "", "a number is missing"),
        ("portions-1-amount", "-2", "0 or more"),
        ("portions-1-unit", "s", "cannot be used here"),
        ("portions-1-unit", "stone", "unknown unit"),
        ("portions-1-uncertainty", "some", "'some' is no number"),
    ],
)
def test_a_wrong_stock_comes_back_at_its_field(
    browser: Client, shelf: Study, field: str, value: str, says: str
) -> None:
    response = browser.post(STOCK, {**FLASK, field: value})
    assert response.status_code == 422
    assert says.lower() in wrong_at(response, field).lower()
    assert Stock.objects.count() == 0
    assert 'value="water"' in response.content.decode()


def test_a_stock_of_nothing_and_one_beyond_all_measure_are_refused(browser: Client, shelf: Study) -> None:
    nothing = {name: value for name, value in FLASK.items() if not name.startswith("portions")}
    assert "The stock holds nothing" in text_of(browser.post(STOCK, nothing))
    response = browser.post(STOCK, {**FLASK, "portions-1-amount": "1e6", "portions-1-unit": "kg"})
    assert response.status_code == 422
    assert "at most 1000 mol/L" in text_of(response)


def test_portions_are_added_and_taken_out_without_a_script(browser: Client, shelf: Study) -> None:
    added = browser.post(STOCK, {**FLASK, "portions": "add"})
    assert added.status_code == 200
    assert 'name="portions-2-source"' in added.content.decode()
    left = browser.post(STOCK, {**FLASK, "portions": "out-1"}).content.decode()
    assert 'value="S-1"' not in left.replace('<option value="S-1">', "")


def test_a_portion_without_a_molar_mass_says_which(browser: Client, shelf: Study) -> None:
    enter_compound(user=shelf.user, project_id=shelf.project.pk, name="resin")
    response = browser.post(STOCK, {**FLASK, "portions-1-kind": "compound", "portions-1-source": "resin"})
    assert "the molar mass of compound resin is not known" in wrong_at(response, "portions-1-source").lower()


@pytest.mark.parametrize("address", [COMPOUND, LOT, STOCK])
def test_an_empty_form_that_is_sent_says_what_is_missing(browser: Client, study: Study, address: str) -> None:
    response = browser.post(address, {})
    assert response.status_code == 422
    assert 'class="wrong"' in response.content.decode()


def test_every_field_has_its_label(browser: Client, shelf: Study) -> None:
    for address in (COMPOUND, LOT, STOCK, f"{LOT}?revise=S-1"):
        html = browser.get(address).content.decode()
        labelled = set(re.findall(r'<label for="([^"]+)"', html))
        fields = set(re.findall(r'<(?:input|select|textarea)[^>]* id="([^"]+)"', html)) - {"search"}
        assert fields - labelled == set()
        assert "style=" not in html


def test_the_page_costs_five_queries_however_much_is_on_the_shelf(browser: Client, shelf: Study) -> None:
    where = {"user": shelf.user, "project_id": shelf.project.pk}
    for i in range(55):
        enter_compound(**where, name=f"c{i:02d}", molar_mass=100.0)
    make_up_stock(**where, code="F1", portions=[Portion(1.0, "g", lot="S-1")], volume=(10.0, "mL"))
    browser.get(LIST)
    with CaptureQueriesContext(connection) as counted:
        html = browser.get(LIST).content.decode()
    assert len(counted) <= 5
    assert len(re.findall(r'<th scope="row">c\d\d</th>', html)) == 50
    following = re.search(r'rel="next" href="(\?compounds=[^"#]+)', html)
    assert following is not None
    second = browser.get(LIST + unescape(following[1])).content.decode()
    assert len(re.findall(r'<th scope="row">c\d\d</th>', second)) == 5
    assert browser.get(LIST, {"lots": "nonsense"}).status_code == 400


def test_an_empty_shelf_says_what_to_do_first(browser: Client, study: Study) -> None:
    assert "Enter the compounds of the reaction first" in text_of(browser.get(LIST))


def test_readers_see_and_only_contributors_enter(client: Client, shelf: Study) -> None:
    assert client.get(LIST)["Location"].startswith("/login/")
    client.force_login(make_member(shelf.project, "reader"))
    html = client.get(LIST).content.decode()
    assert "salt" in html
    assert "/new/" not in html
    assert {client.post(a, SALT).status_code for a in (COMPOUND, LOT, STOCK)} == {403}
    assert {client.get(a).status_code for a in (COMPOUND, LOT, STOCK)} == {403}
    client.force_login(make_user("stranger"))
    assert {client.get(a).status_code for a in (LIST, COMPOUND, LOT, STOCK)} == {404}
