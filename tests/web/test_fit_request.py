"""Asking for a fit on a page: casting, constants, settings, and what is refused at its field."""

from __future__ import annotations

from typing import Any

import pytest
from django.test import Client

from kinetics_db.datasets.models import Dataset
from kinetics_db.engine.fitting.problem import Constant, Prior
from kinetics_db.fits.models import Fit
from kinetics_db.fits.request import FitRequest
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.models import MechanismVersion
from tests.factories.people import make_member, make_project, make_user
from tests.web.forms_sent import sent_by, wrong_at
from tests.web.study import RIGHT, WRONG, Study
from tests.web.test_project import text_of

NEW = "/projects/oxidation/fits/new/"
OTHER_NAMES = "S --k_ox--> P\nobserve signal = [P]\n"


@pytest.fixture
def dataset(study: Study) -> Dataset:
    study.run("K01")
    study.run("K02", kelvin=308.15)
    return study.dataset()


@pytest.fixture
def version(study: Study) -> MechanismVersion:
    return study.version("first order", RIGHT)


@pytest.fixture
def address(dataset: Dataset, version: MechanismVersion) -> str:
    return f"{NEW}?dataset={dataset.pk}&version={version.pk}"


def ask(browser: Client, address: str, **changes: Any) -> Any:
    """What comes of sending the page's form with changes."""
    page = browser.get(address)
    assert page.status_code == 200
    return browser.post(address, sent_by(page, **{"constant__1__start": "1e-3", **changes}))


def asked() -> FitRequest:
    return FitRequest.from_plain(Fit.objects.get().content)


def test_dataset_and_version_are_chosen_first(
    browser: Client, dataset: Dataset, version: MechanismVersion
) -> None:
    html = browser.get(NEW).content.decode()
    assert f'<option value="{dataset.pk}">all v1</option>' in html
    assert f'<option value="{version.pk}">first order v1</option>' in html
    assert "Ask for the fit" not in html
    for half in (f"{NEW}?dataset={dataset.pk}&version=", f"{NEW}?version={version.pk}"):
        assert "Ask for the fit" not in browser.get(half).content.decode()


def test_equal_names_are_cast_and_units_stand_beside_the_constants(browser: Client, address: str) -> None:
    page = browser.get(address)
    sent = sent_by(page)
    assert sent["cast-compound-1"] == ["as:alcohol"]
    assert sent["cast-column-1"] == ["as:alcohol"] and sent["cast-column-2"] == ["as:ketone"]
    assert "k ox in 1/s" in text_of(page.content.decode())
    assert sent["constant-1-start"] == [""]


def test_the_form_as_it_is_sent_asks_for_the_fit(browser: Client, address: str) -> None:
    response = ask(browser, address, constant__1__scope="in a group", settings__confidence="0.9")
    fit = Fit.objects.get()
    assert response["Location"] == f"/fits/{fit.pk}/"
    request = asked()
    assert request.constants == (Constant("k_ox", 1e-3, scope="in a group", group_by="temperature"),)
    assert request.casting.to_plain() == {
        "compounds": {"alcohol": "alcohol"},
        "columns": {"alcohol": "alcohol", "ketone": "ketone"},
    }
    assert request.settings.confidence == 0.9
    assert request.settings.max_seconds == 900 and request.settings.error_model == "as tabulated"


def test_everything_that_can_be_asked_for_arrives(browser: Client, address: str) -> None:
    ask(
        browser,
        address,
        constant__1__scope="own per run",
        constant__1__lower="1e-6",
        constant__1__upper="1",
        constant__1__prior_mean="0.002",
        constant__1__prior_sd="0.5",
        constant__1__starts="K01: 0.002\r\n308.15 K: 0.004\r\n",
        species__1__fitted="on",
        species__1__start="0.1",
        species__1__scope="same in all runs",
        settings__error_model="one sigma",
        settings__starts="3",
        settings__seed="7",
        settings__start_spread="100",
        settings__rtol="1e-9",
        without_owners=["standard"],
    )
    request = asked()
    (constant,) = request.constants
    assert (constant.lower, constant.upper, constant.prior) == (1e-6, 1.0, Prior(0.002, 0.5))
    assert constant.starts == {"K01": 0.002, "308.15 K": 0.004}
    (start,) = request.start_concentrations
    assert (start.species, start.start, start.scope) == ("alcohol", 0.1, "same in all runs")
    assert request.settings.starts == 3 and request.settings.seed == 7 and request.settings.rtol == 1e-9
    assert request.settings.error_model == "one sigma"
    assert request.without_owners == ("standard",)


def test_a_constant_that_may_be_negative(browser: Client, address: str) -> None:
    ask(browser, address, constant__1__start="-0.5", constant__1__signed="on")
    assert asked().constants == (Constant("k_ox", -0.5, positive=False),)


def test_the_same_request_leads_to_the_fit_that_is_there(browser: Client, address: str) -> None:
    ask(browser, address)
    sent = sent_by(browser.get(address), constant__1__start="0.001")
    response = browser.post(address, sent, follow=True)
    assert Fit.objects.count() == 1
    assert response.redirect_chain[0][0] == f"/fits/{Fit.objects.get().pk}/"
    assert "The same fit has been asked for before" in text_of(response.content.decode())


def test_what_has_no_namesake_is_marked_and_must_be_decided(
    browser: Client, study: Study, dataset: Dataset
) -> None:
    version = study.version("other names", OTHER_NAMES)
    address = f"{NEW}?dataset={dataset.pk}&version={version.pk}"
    page = browser.get(address)
    assert text_of(page.content.decode()).count("not decided") == 3
    response = browser.post(address, sent_by(page, constant__1__start="1e-3"))
    assert response.status_code == 422
    assert "The compound 'alcohol' is not assigned" in wrong_at(response, "id_cast-compound-1")
    assert "'plays no part'" in wrong_at(response, "id_cast-compound-1")
    assert "The column 'ketone' is not assigned" in wrong_at(response, "id_cast-column-2")
    assert "no column is assigned to the observable &#x27;signal&#x27;" in response.content.decode().lower()
    assert not Fit.objects.exists()
    cast = {"cast-compound-1": "as:S", "cast-column-1": "none", "cast-column-2": "as:signal"}
    browser.post(address, {**sent_by(response), **cast})
    assert asked().casting.to_plain() == {
        "compounds": {"alcohol": "S"},
        "columns": {"alcohol": None, "ketone": "signal"},
    }


NUMBERS = ["1,5", "many", "<b>1</b>", "1e400", "9" * 400, "x" * 1_000_000, "nan", "inf"]


@pytest.mark.parametrize("value", ["", *NUMBERS], ids=range(len(NUMBERS) + 1))
def test_a_start_value_that_is_no_number_comes_back_at_its_field(
    browser: Client, address: str, value: str
) -> None:
    response = ask(browser, address, constant__1__start=value, settings__seed="12")
    assert response.status_code == 422
    assert "number" in wrong_at(response, "id_constant-1-start")
    again = sent_by(response)
    assert again["constant-1-start"] == [value] and again["settings-seed"] == ["12"]
    assert "<b>1</b>" not in response.content.decode()
    assert not Fit.objects.exists()


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("constant-1-lower", "1,5", "write 1.5"),
        ("constant-1-upper", "x", "is no number"),
        ("constant-1-prior_mean", "", "a number is missing"),
        ("constant-1-starts", "25", "a temperature or run, a colon and a number"),
        ("constant-1-starts", "298.15 K: fast", "is no number"),
        ("constant-1-start", "0\x00", "Null characters"),
        ("constant-1-scope", "own <each>", "Choose one of the list"),
        ("cast-column-1", "as:water", "Choose one of the list"),
        ("species-1-start", "0.1", ""),
        ("settings-starts", "1.5", "whole number"),
        ("settings-error_model", "none", "Choose one of the list"),
        ("settings-max_seconds", "1e400", "too large"),
        ("without_owners", "nobody", "Choose one of the list"),
    ],
)
def test_what_cannot_be_read_is_told_at_its_field(
    browser: Client, address: str, field: str, value: str, says: str
) -> None:
    extra = {"constant-1-prior_sd": "0.5"} if field == "constant-1-prior_mean" else {}
    response = ask(browser, address, **{field.replace("-", "__"): value}, **extra)
    assert response.status_code == 422
    place = "species-1-fitted" if field == "species-1-start" else field
    assert says.lower() in wrong_at(response, f"id_{place}").lower() and wrong_at(response, f"id_{place}")
    assert not Fit.objects.exists()


@pytest.mark.parametrize(
    ("changes", "field", "says"),
    [
        ({"constant-1-start": "-1"}, "constant-1-start", "is not positive"),
        ({"constant-1-start": "1e200"}, "constant-1-start", "too large"),
        ({"constant-1-lower": "1"}, "constant-1-start", "below its lower bound"),
        ({"constant-1-upper": "-1", "constant-1-start": "-2"}, "constant-1-upper", "is not positive"),
        ({"constant-1-lower": "-1"}, "constant-1-lower", "is negative"),
        ({"constant-1-prior_mean": "-1", "constant-1-prior_sd": "1"}, "constant-1-prior_mean", "prior mean"),
        ({"constant-1-prior_mean": "1", "constant-1-prior_sd": "0"}, "constant-1-prior_sd", "prior sd"),
        ({"constant-1-starts": "nowhere: 1"}, "constant-1-starts", "no value of its own"),
        ({"species-1-fitted": "on", "species-1-start": "-1"}, "species-1-start", "is not positive"),
        ({"settings-starts": "0"}, "settings-starts", "1 to 10000"),
        ({"settings-confidence": "95"}, "settings-confidence", "between 0 and 1"),
        ({"settings-rtol": "1"}, "settings-rtol", "1e-13"),
        ({"settings-max_seconds": "1e9"}, "settings-max_seconds", "7 days"),
        ({"cast-column-1": "as:ketone"}, "", "two columns are cast as"),
    ],
)
def test_what_the_checks_of_a_fit_refuse_stands_at_its_field(
    browser: Client, address: str, changes: dict[str, str], field: str, says: str
) -> None:
    page = browser.get(address)
    response = browser.post(address, {**sent_by(page, constant__1__start="1e-3"), **changes})
    assert response.status_code == 422
    told = wrong_at(response, f"id_{field}") if field else text_of(response.content.decode())
    assert says.lower() in told.lower()
    for name, value in changes.items():
        assert sent_by(response)[name] == [value]
    assert not Fit.objects.exists()


def test_what_is_wrong_with_several_runs_is_said_once(browser: Client, study: Study) -> None:
    from kinetics_db.runs.entry import Amount
    from tests.factories.flow import lines, make_reported_table, make_run

    for code in ("R1", "R2"):
        run = make_run(study.user, study.project.pk, code, {"ester": Amount(100.0, "%")})
        text = lines(("time / min", "ester / %"), (0, 100.0), (10, 60.5), (20, 36.1))
        make_reported_table(study.user, run, text, {"ester": "ester"}, name=f"{code}.txt")
    version = study.version("decay", "ester --k--> acid\n")
    address = f"{NEW}?dataset={study.dataset().pk}&version={version.pk}"
    text = text_of(ask(browser, address).content.decode())
    assert "R1, R2: no standard uncertainties are tabulated (a sigma per point, or one fitted sigma)" in text
    assert "in percent" in text


def test_an_earlier_fit_fills_the_form(browser: Client, study: Study, dataset: Dataset) -> None:
    constant = Constant(
        "k_ox", 5e-3, scope="in a group", group_by="temperature", upper=2.0, prior=Prior(1e-3, 2.0),
        starts={"298.15 K": 1e-3},
    )  # fmt: skip
    like = request_fit(
        user=study.user,
        dataset=dataset,
        mechanism_version=study.version("first order", RIGHT),
        constants=[constant],
        without_owners=["standard"],
    )
    address = f"{NEW}?like={like.pk}"
    page = browser.get(address)
    assert f"begun like fit {like.pk}" in text_of(page.content.decode())
    response = browser.post(address, sent_by(page))
    assert response["Location"] == f"/fits/{like.pk}/"  # nothing was changed: the same request
    browser.post(address, sent_by(page, constant__1__upper="3"))
    newest = Fit.objects.latest("pk")
    assert FitRequest.from_plain(newest.content).constants[0].upper == 3.0
    assert FitRequest.from_plain(newest.content).without_owners == ("standard",)


def test_a_rival_is_filled_as_far_as_names_are_the_same(
    browser: Client, study: Study, dataset: Dataset
) -> None:
    like = study.fit("first order", RIGHT, dataset, start=4e-3, compute=False)
    rival = study.version("rival", RIGHT + "ketone --k_back--> alcohol\n")
    sent = sent_by(browser.get(f"{NEW}?like={like.pk}&version={rival.pk}"))
    assert sent["constant-1-start"] == ["0.004"] and sent["constant-2-start"] == [""]


def test_a_mechanism_too_large_for_the_page_is_said_to_be(
    browser: Client, study: Study, dataset: Dataset
) -> None:
    steps = "".join(f"A{i} --k_{i}--> A{i + 1}\n" for i in range(200))
    version = study.version("long", steps)
    text = text_of(browser.get(f"{NEW}?dataset={dataset.pk}&version={version.pk}").content.decode())
    assert "200 constants are more than this page has room for" in text


def test_without_datasets_or_mechanisms_the_page_says_what_comes_first(browser: Client, study: Study) -> None:
    text = text_of(browser.get(NEW).content.decode())
    assert "No dataset yet" in text and "No mechanism yet" in text


@pytest.mark.parametrize("asked_for", ["x", "-1", "1.5", "9" * 400, "%00"])
def test_a_number_in_the_address_that_is_none_is_as_good_as_none(
    browser: Client, study: Study, asked_for: str
) -> None:
    query = f"?dataset={asked_for}&version={asked_for}&like={asked_for}"
    assert browser.get(NEW + query).status_code == 200


def test_records_of_other_projects_cannot_be_chosen(browser: Client, study: Study, dataset: Dataset) -> None:
    other = Study(study.user, make_project(study.user))
    other.run("X1")
    theirs, version = other.dataset(), other.version("first order", WRONG)
    fit = other.fit("first order", RIGHT, theirs, compute=False)
    for query in (f"?dataset={theirs.pk}", f"?version={version.pk}", f"?like={fit.pk}", "?dataset=999999"):
        assert browser.get(NEW + query).status_code == 404


def test_readers_may_not_ask_and_strangers_not_even_look(client: Client, study: Study, address: str) -> None:
    sent = {"constant-1-start": "1e-3"}
    assert client.get(address)["Location"].startswith("/login/")
    client.force_login(make_member(study.project, "reader", "rhea"))
    assert client.get(address).status_code == client.post(address, sent).status_code == 403
    client.force_login(make_user("stranger"))
    assert client.get(address).status_code == client.post(address, sent).status_code == 404
    assert not Fit.objects.exists()
