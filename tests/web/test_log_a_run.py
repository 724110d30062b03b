"""Logging a run through its form, from nothing and from a copy, and revising it."""

from __future__ import annotations

import re
from dataclasses import replace
from html import unescape

import pytest
from django.http import HttpResponse
from django.test import Client

from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.services import create_project
from kinetics_db.runs.models import Run, RunRevision
from kinetics_db.runs.selectors import entry_of, latest_revision, start_concentrations
from kinetics_db.runs.services import revise_run, seal_run
from tests.factories.people import make_member, make_user
from tests.web.study import Study

NEW = "/projects/oxidation/runs/new/"
AMOUNTS = "/projects/oxidation/runs/amounts/"


@pytest.fixture
def lab(study: Study) -> Study:
    """Materials to charge."""
    where = {"user": study.user, "project_id": study.project.pk}
    enter_compound(**where, name="alcohol", molar_mass=100.0)
    enter_compound(**where, name="oxidant")
    enter_lot(**where, code="K-7", compound="alcohol", purity=0.98, purity_uncertainty=0.005)
    make_up_stock(
        **where, code="S1", portions=[Portion(1.0, "mmol", compound="oxidant")], volume=(10.0, "mL")
    )
    return study


def typed(**changes: str) -> dict[str, str]:
    """A form as it is sent: 10 mg of a lot and a stock in 10 mL."""
    values = {
        "code": "K10",
        "temperature_value": "40",
        "temperature_unit": "degC",
        "temperature_uncertainty": "0.2",
        "volume_value": "10",
        "volume_unit": "mL",
        "charges-1-kind": "lot",
        "charges-1-source": "K-7",
        "charges-1-amount": "10.0",
        "charges-1-unit": "mg",
        "charges-1-uncertainty": "0.1",
        "charges-2-kind": "stock",
        "charges-2-source": "S1",
        "charges-2-amount": "500",
        "charges-2-unit": "uL",
    }
    values.update(changes)
    return values


def text_of(response: HttpResponse) -> str:
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", response.content.decode())).split())


def value_of(response: HttpResponse, name: str) -> str:
    """What stands in a field of the form."""
    html = response.content.decode()
    found = re.search(rf'<input[^>]*name="{re.escape(name)}"[^>]*>', html)
    if found is None:
        return unescape(re.search(rf'<textarea name="{name}"[^>]*>\n?([^<]*)', html)[1])
    value = re.search(r'value="([^"]*)"', found[0])
    return unescape(value[1]) if value else ""


def test_a_run_is_logged_as_it_was_typed(browser: Client, lab: Study) -> None:
    sent = typed(
        **{
            "started": "2026-03-05T09:30:00+01:00",
            "atmosphere": "argon",
            "control_kind": "blank",
            "notes": "stirred\r\nslowly",
            "vessel-name": "flask 3",
            "clock-first_contact_value": "5",
            "clock-first_contact_unit": "s",
        }
    )
    response = browser.post(NEW, sent, follow=True)
    revision = latest_revision(Run.objects.get(code="K10"))
    assert response.redirect_chain == [(f"/runs/{revision.run_id}/", 302)]
    assert "Run K10 is logged." in text_of(response)
    entry = entry_of(revision)
    assert [(c.lot, c.stock, c.amount.value, c.amount.unit, c.amount.uncertainty) for c in entry.charges] == [
        ("K-7", None, 10.0, "mg", 0.1),
        (None, "S1", 500.0, "uL", 0.0),
    ]
    assert entry.notes == "stirred\nslowly"
    assert entry.started == "2026-03-05T09:30:00+01:00"
    assert entry.sections["vessel"] == {"name": "flask 3"}
    assert revision.content["first_contact"] == 5.0
    assert revision.content["temperature"] == {"value": 313.15, "u": 0.2}
    starts = {part.compound: part for part in start_concentrations(revision)}
    assert starts["alcohol"].value == pytest.approx(0.0098)
    assert starts["oxidant"].value == pytest.approx(0.005)


def test_a_time_without_a_zone_is_in_the_persons_own(browser: Client, lab: Study) -> None:
    lab.user.time_zone = "Europe/Paris"
    lab.user.save()
    browser.post(NEW, typed(started="2026-07-05 09:30"))
    assert entry_of(latest_revision(Run.objects.get())).started == "2026-07-05T09:30:00+02:00"


def test_the_form_says_what_each_field_is(browser: Client, lab: Study) -> None:
    html = browser.get(NEW).content.decode()
    labelled = set(re.findall(r'<label for="([^"]+)"', html))
    fields = set(re.findall(r'<(?:input|select|textarea)[^>]* id="([^"]+)"', html)) - {"search"}
    hidden = {f"id_{name}" for name in ("against", "based_on", "charges-1-was")}
    assert fields - labelled - hidden == set()
    assert '<option value="K-7">' in html
    assert "style=" not in html


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("code", "", "The run has no code"),
        ("code", "x" * 81, "81 characters are too many"),
        ("code", "K\x0710", "cannot be stored"),
        ("code", "K\x0010", "Null characters are not allowed"),
        ("started", "yesterday", "is no date and time with a zone"),
        ("started", "<b>now</b>", "is no date and time with a zone"),
        ("temperature_value", "1e400", "is too large for a number"),
        ("temperature_value", "warm", "'warm' is no number"),
        ("temperature_value", "1,5", "'1,5' is no number (write 1.5)"),
        ("temperature_value", "-400", "is no reaction temperature"),
        ("temperature_unit", "", "A unit is missing"),
        ("temperature_unit", "C", "write degC"),
        ("temperature_uncertainty", "nan", "'nan' is no number"),
        ("volume_value", "0", "a volume above 0 L"),
        ("volume_unit", "mg", "cannot become"),
        ("control_kind", "half", "is no kind of control"),
        ("replicate_of", "K99", "is no other run of this project"),
        ("notes", "x" * 1_000_000, "1000000 characters are too many"),
        ("charges-1-source", "K-8<script>", "There is no lot 'K-8<script>' in this project"),
        ("charges-1-source", "", "What was put in is not named"),
        ("charges-1-amount", "", "A number is missing"),
        ("charges-1-amount", "9" * 1_000_000, "is no number"),
        ("charges-1-amount", "-1", "Charge of -1.0 mg"),
        ("charges-1-amount", "1e-400", "too small for a number"),
        ("charges-1-unit", "stone", "unknown unit 'stone'"),
        ("charges-1-unit", "s", "cannot be used here"),
        ("charges-1-kind", "barrel", "is no kind of source"),
        ("charges-2-uncertainty", "٣", "is no number"),
        ("charges-2-note", "x" * 1001, "1001 characters are too many"),
        ("vessel-name", "x" * 2001, "2001 characters are too many"),
        ("vessel-path_value", "x", "'x' is no number"),
    ],
)
def test_what_cannot_be_stored_comes_back_at_its_field_and_keeps_the_input(
    browser: Client, lab: Study, field: str, value: str, says: str
) -> None:
    response = browser.post(NEW, typed(**{field: value}))
    assert response.status_code == 422
    assert Run.objects.count() == 0
    html = response.content.decode()
    place = re.search(
        rf'<(?:ul class="wrong"|li) id="id_{re.escape(field)}_error">(.*?)</(?:ul|li)>', html, re.S
    )
    assert place is not None, re.findall(r'class="wrong"[^>]*>.*?</ul>', html, re.S)
    assert says.lower() in unescape(re.sub(r"<[^>]+>", "", place[1])).lower()
    assert value_of(response, "charges-2-source") == "S1"
    if not field.endswith("kind"):
        assert value_of(response, field).strip() == value.strip().replace("\x00", "\x00")
    assert "<script>" not in html.replace("<script src", "").replace("<script type", "")


def test_an_amount_of_a_section_needs_its_unit(browser: Client, lab: Study) -> None:
    response = browser.post(NEW, typed(**{"clock-first_contact_value": "5"}))
    html = response.content.decode()
    assert re.search(
        r'id="id_clock-first_contact_unit_error"><li>A unit is missing \(for example s, min\)', html
    )
    assert re.search(r'<details class="section" open>\s*<summary>Clock', html)


def test_all_problems_are_told_at_once(browser: Client, lab: Study) -> None:
    response = browser.post(
        NEW, typed(code="", **{"charges-1-amount": "ten", "charges-2-source": "S9", "temperature_value": "x"})
    )
    text = text_of(response)
    for says in ("'ten' is no number", "There is no stock 'S9'", "'x' is no number", "The run has no code"):
        assert says in text


def test_a_compound_that_is_not_known_can_be_entered_from_there(browser: Client, lab: Study) -> None:
    sent = typed(**{"charges-1-kind": "compound", "charges-1-source": "new & <odd>"})
    response = browser.post(NEW, sent)
    html = response.content.decode()
    address = re.search(r'href="(/projects/oxidation/materials/compounds/new/[^"]*)"', html)
    assert address is not None
    form = browser.get(unescape(address[1]))
    assert value_of(form, "name") == "new & <odd>"


def test_a_name_of_another_kind_is_pointed_out(browser: Client, lab: Study) -> None:
    response = browser.post(NEW, typed(**{"charges-1-kind": "compound"}))
    assert "There is a lot 'K-7'; choose lot for it." in text_of(response)


def test_the_place_of_a_problem_counts_only_rows_that_are_filled(browser: Client, lab: Study) -> None:
    sent = {name.replace("charges-2", "charges-4"): value for name, value in typed().items()}
    sent |= {"charges-2-kind": "compound", "charges-4-unit": "s"}
    response = browser.post(NEW, sent)
    assert 'id="id_charges-3-unit_error"' in response.content.decode()


def test_rows_are_added_moved_and_taken_out_without_a_script(browser: Client, lab: Study) -> None:
    added = browser.post(NEW, typed(charges="add"))
    assert added.status_code == 200
    assert value_of(added, "charges-3-source") == ""
    assert re.search(r'<select name="charges-3-kind"[^>]*autofocus', added.content.decode())
    moved = browser.post(NEW, typed(charges="up-2"))
    assert [value_of(moved, f"charges-{i}-source") for i in (1, 2)] == ["S1", "K-7"]
    down = browser.post(NEW, typed(charges="down-1"))
    assert [value_of(down, f"charges-{i}-source") for i in (1, 2)] == ["S1", "K-7"]
    left = browser.post(NEW, typed(charges="out-1"))
    assert value_of(left, "charges-1-source") == "S1"
    assert "charges-2-source" not in left.content.decode()
    assert value_of(left, "code") == "K10"
    assert Run.objects.count() == 0


@pytest.mark.parametrize("button", ["out-9", "up-0", "down-9999", "out-1"])
def test_buttons_of_rows_that_are_not_there_do_no_harm(browser: Client, lab: Study, button: str) -> None:
    assert browser.post(NEW, {"charges": button}).status_code == 200


def test_concentrations_appear_while_the_rest_is_still_wrong(browser: Client, lab: Study) -> None:
    sent = typed(code="", **{"charges-2-amount": ""})
    text = text_of(browser.post(AMOUNTS, sent, headers={"HX-Request": "true"}))
    assert "alcohol 9.80(11) mmol/L" in text
    assert "in 10 mL" in text
    assert "charge 2: A number is missing" in text
    assert "<html" not in text


def test_concentrations_can_be_asked_for_without_a_script(browser: Client, lab: Study) -> None:
    response = browser.post(NEW, typed(look="1"))
    assert response.status_code == 200
    assert "alcohol 9.80(11) mmol/L" in text_of(response)
    assert Run.objects.count() == 0


@pytest.mark.parametrize(
    "sent", [{}, {"against": "x.y"}, {"against": "9" * 40}, {"charges-1-amount": "\x00"}]
)
def test_the_amounts_of_nonsense_are_words(browser: Client, lab: Study, sent: dict[str, str]) -> None:
    assert browser.post(AMOUNTS, sent).status_code == 200


def test_a_copy_fills_the_form_and_leaves_code_and_start_open(browser: Client, lab: Study) -> None:
    browser.post(NEW, typed(notes="as <usual>", started="2026-03-05T09:30:00+01:00"))
    first = Run.objects.get()
    response = browser.get(f"{NEW}?copy={first.pk}")
    assert (value_of(response, "code"), value_of(response, "started")) == ("", "")
    assert "K11 is free" in text_of(response)
    assert "copied from K10 (r1)" in text_of(response)
    fields = {name: value_of(response, name) for name in typed() if not name.endswith("kind")}
    assert fields == {name: v for name, v in typed(code="").items() if not name.endswith("kind")} | {
        "charges-1-amount": "10"
    }
    assert value_of(response, "notes") == "as <usual>"


def test_what_differs_from_the_original_is_marked_by_word(browser: Client, lab: Study) -> None:
    browser.post(NEW, typed())
    first = Run.objects.get()
    sent = typed(code="", temperature_value="50", **{"charges-1-was": "1", "charges-1-amount": "12"})
    response = browser.post(f"{NEW}?copy={first.pk}", sent)
    text = text_of(response)
    assert "Temperature (changed, was '40')" in text
    assert "changed: amount was '10'" in text
    assert "changed: added" in text  # the second row does not say that it comes from the copy
    assert "taken out: stock S1, 500 uL" in text
    live = text_of(browser.post(AMOUNTS, {**sent, "against": f"{first.pk}.1"}))
    assert "Changed against K10 (r1): temperature: 40 ± 0.2 degC → 50 ± 0.2 degC" in live
    assert "lot K-7: 10 ± 0.1 mg → 12 ± 0.1 mg" in live


@pytest.mark.parametrize("copied", ["x", "999999", "9" * 50, ""])
def test_a_copy_of_nothing_is_an_empty_form(browser: Client, lab: Study, copied: str) -> None:
    response = browser.get(NEW, {"copy": copied})
    assert response.status_code == 200
    assert "copied from" not in text_of(response)


def test_a_run_of_another_project_is_not_copied(browser: Client, lab: Study) -> None:
    other = Study(make_user(), lab.project)
    foreign = Study(other.user, create_project(user=other.user, slug="elsewhere", name="Else")).run("Q1")
    assert "copied from" not in text_of(browser.get(NEW, {"copy": foreign.pk}))


def revise_address(run: Run) -> str:
    return f"/runs/{run.pk}/revise/"


def test_sending_the_revision_form_unchanged_changes_nothing(browser: Client, lab: Study) -> None:
    browser.post(
        NEW, typed(notes="two\r\nlines", **{"headspace-volume_value": "5", "headspace-volume_unit": "mL"})
    )
    run = Run.objects.get()
    page = browser.get(revise_address(run))
    html = page.content.decode().partition('class="entry"')[2]
    sent = {}
    for name in re.findall(r' name="([^"]+)"', html):
        if name not in ("charges", "look", "csrfmiddlewaretoken"):
            sent[name] = unescape(value_of(page, name)) if "kind" not in name else ""
    sent |= {"charges-1-kind": "lot", "charges-2-kind": "stock"}
    response = browser.post(revise_address(run), sent, follow=True)
    assert "nothing was changed" in text_of(response)
    assert RunRevision.objects.count() == 1


def test_a_revision_keeps_the_code_and_is_stored_with_its_reason(browser: Client, lab: Study) -> None:
    browser.post(NEW, typed())
    run = Run.objects.get()
    sent = typed(code="K77", temperature_value="45", based_on="1", reason="misread")
    response = browser.post(revise_address(run), sent, follow=True)
    assert "revision 2 is stored" in text_of(response)
    revision = latest_revision(run)
    assert (revision.number, revision.reason, revision.content["code"]) == (2, "misread", "K10")
    assert revision.content["temperature"]["value"] == 318.15


def test_a_conflict_shows_both_versions_and_keeps_the_input(browser: Client, lab: Study) -> None:
    browser.post(NEW, typed())
    run = Run.objects.get()
    colleague = make_member(lab.project, "contributor", "jun")
    changed = replace(entry_of(latest_revision(run)), atmosphere="argon", notes="of <jun>")
    revise_run(user=colleague, run=run, entry=changed, based_on=1)
    sent = typed(temperature_value="45", based_on="1", notes="of mira")
    response = browser.post(revise_address(run), sent)
    assert response.status_code == 422
    text = text_of(response)
    assert "jun stored revision 2" in text
    assert "temperature 45 ± 0.2 degC 40 ± 0.2 degC" in text
    assert "atmosphere nothing argon" in text
    assert "notes of mira of <jun>" in text
    assert value_of(response, "notes") == "of mira"
    assert value_of(response, "based_on") == "2"
    assert RunRevision.objects.count() == 2
    browser.post(revise_address(run), {**sent, "based_on": "2", "atmosphere": "argon"})
    newest = latest_revision(run).content
    assert (newest["notes"], newest["atmosphere"]) == ("of mira", "argon")


@pytest.mark.parametrize("based_on", ["", "0", "x", "-1", "9" * 30, "7"])
def test_a_revision_based_on_nothing_is_a_conflict(browser: Client, lab: Study, based_on: str) -> None:
    browser.post(NEW, typed())
    response = browser.post(revise_address(Run.objects.get()), typed(based_on=based_on, notes="new"))
    assert response.status_code == 422
    assert RunRevision.objects.count() == 1


def test_a_sealed_run_asks_for_a_reason(browser: Client, lab: Study) -> None:
    browser.post(NEW, typed())
    run = seal_run(user=lab.user, run=Run.objects.get())
    response = browser.post(revise_address(run), typed(based_on="1", notes="late"))
    assert response.status_code == 422
    assert "The run is sealed (say why it is amended)" in text_of(response)
    assert (
        browser.post(revise_address(run), typed(based_on="1", notes="late", reason="typo")).status_code == 302
    )


def test_only_contributors_come_to_the_forms(client: Client, lab: Study) -> None:
    run = lab.run("K01")
    addresses = [NEW, revise_address(run)]
    assert all(client.get(a)["Location"].startswith("/login/") for a in addresses)
    client.force_login(make_member(lab.project, "reader"))
    assert {client.get(a).status_code for a in addresses} == {403}
    assert {client.post(a, typed()).status_code for a in [*addresses, AMOUNTS]} == {403}
    client.force_login(make_user("stranger"))
    assert {client.post(a, typed()).status_code for a in [*addresses, AMOUNTS]} == {404}
    assert client.get(AMOUNTS).status_code == 405


def test_a_run_may_hold_as_many_charges_as_the_record_allows(browser: Client, lab: Study) -> None:
    sent = typed()
    for i in range(1, 201):
        row = {
            "kind": "stock",
            "source": "S1",
            "amount": "1",
            "unit": "uL",
            "uncertainty": "",
            "note": "",
            "was": "",
        }
        sent |= {f"charges-{i}-{name}": value for name, value in row.items()}
    assert browser.post(NEW, sent).status_code == 302
    assert len(entry_of(latest_revision(Run.objects.get())).charges) == 200
