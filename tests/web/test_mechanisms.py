"""Mechanisms on pages: written with checks in place, kept in versions."""

from __future__ import annotations

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from kinetics_db.mechanisms.models import MechanismVersion
from tests.factories.people import make_member, make_project, make_user
from tests.web.forms_sent import sent_by, wrong_at
from tests.web.study import RIGHT, Study
from tests.web.test_project import text_of

LIST = "/projects/oxidation/mechanisms/"
NEW = f"{LIST}new/"
CHECK = f"{LIST}check/"
MOST_QUERIES_OF_A_LIST = 5
HTMX = {"HX-Request": "true"}


def check(browser: Client, text: str, **more: str) -> str:
    response = browser.post(CHECK, {"text": text, **more}, headers=HTMX)
    assert response.status_code == 200
    return response.content.decode()


def test_a_text_that_is_sent_is_stored_as_a_version_and_shown(browser: Client, study: Study) -> None:
    sent = {
        "name": "first order",
        "text": "alcohol --k_ox--> ketone\r\n# and that is all\r\n",
        "note": "simplest",
    }
    response = browser.post(NEW, sent, follow=True)
    version = MechanismVersion.objects.get()
    assert response.redirect_chain == [(f"/versions/{version.pk}/", 302)]
    assert version.text == "alcohol --k_ox--> ketone\n# and that is all\n"
    text = text_of(response.content.decode())
    assert "first order v1 is stored" in text
    assert "simplest" in text and "and that is all" in text
    assert "k ox 1/s a fit" in text
    assert "written by mira" in text
    assert version.digest[:10] in text
    assert "Not fitted yet" in text


def test_the_next_version_begins_with_the_text_of_the_one_before(browser: Client, study: Study) -> None:
    first = study.version("path", RIGHT)
    response = browser.get(f"{NEW}?from={first.pk}")
    sent = sent_by(response)
    assert sent["name"] == ["path"] and sent["text"] == [RIGHT]
    response = browser.post(NEW, {**sent, "text": RIGHT + "ketone --k_back--> alcohol\n"}, follow=True)
    assert "path v2 is stored" in text_of(response.content.decode())
    assert f'href="/versions/{first.pk}/"' in response.content.decode()


def test_the_same_mechanism_typed_otherwise_leads_to_the_version_that_is_there(
    browser: Client, study: Study
) -> None:
    first = study.version("path", RIGHT)
    response = browser.post(NEW, {"name": "path", "text": f"# again\n  {RIGHT}"}, follow=True)
    assert response.redirect_chain == [(f"/versions/{first.pk}/", 302)]
    assert "says the same as path v1" in text_of(response.content.decode())
    assert MechanismVersion.objects.count() == 1


def test_the_check_says_what_is_understood_with_units(browser: Client, study: Study) -> None:
    html = check(browser, "A + B <--k_f / k_b--> C\nobserve sum = [A] + [C]\nwhere k_b = k_f/K\n")
    text = text_of(html)
    assert "This can be stored" in text
    assert "k f L/mol/s a fit" in text
    assert "k b 1/s computed from the others" in text
    assert "Species A, B, C" in text
    assert "Observables sum" in text
    assert "<html" not in html


def test_the_check_names_every_problem_with_its_line_and_column_and_quotes_it(
    browser: Client, study: Study
) -> None:
    html = check(browser, "A + B --k_1--> C\nA --k_1--> D\nobesrve x = [A]\n")
    text = text_of(html)
    assert "2 problems" in text
    assert 'data-line="2" data-column="5"' in html
    assert "A --<mark>k</mark>_1--&gt; D" in html
    assert "error line 3, column 1 : &#x27;obesrve&#x27;" in html or "'obesrve' is not a statement" in text
    assert "did you mean observe?" in text
    assert "<mark>o</mark>besrve" in html


def test_warnings_inform_and_do_not_stop(browser: Client, study: Study) -> None:
    text = text_of(check(browser, "A --k--> B\nwhere k_2 = 3\n"))
    assert "This can be stored. Look at the warnings first." in text
    assert "computed but used in no step" in text
    version = study.version("with a warning", "A --k--> B\nwhere k_2 = 3\n")
    page = text_of(browser.get(f"/versions/{version.pk}/").content.decode())
    assert "computed but used in no step" in page


def test_a_blank_text_is_no_error_while_it_is_only_begun(browser: Client, study: Study) -> None:
    assert "appears here while it is written" in check(browser, "  \n")


def test_without_scripts_the_check_gives_the_whole_page_and_keeps_everything(
    browser: Client, study: Study
) -> None:
    sent = {"name": "p <i>", "text": "A --k--> ", "note": "n & m"}
    response = browser.post(CHECK, sent)
    assert response.status_code == 200
    again = sent_by(response)
    assert again["text"] == ["A --k--> "] and again["name"] == ["p <i>"] and again["note"] == ["n & m"]
    assert "This cannot be used yet" in text_of(response.content.decode())
    assert not MechanismVersion.objects.exists()


HOSTILE = [
    "",
    "A --k--> <script>alert(1)</script>",
    "A --k\x00--> B",
    "A --k--> B\n" * 2100,
    "x" * 1_000_000,
    "A --{ " + "(" * 5000 + "k" + ")" * 5000 + " }--> B",
    "A --1e400--> B",
    "\N{SNOWMAN} --k--> \N{RIGHT-TO-LEFT OVERRIDE}B",
    '"A --k--> B',
]


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_a_text_that_cannot_be_used_comes_back_with_the_reason_and_is_kept(
    browser: Client, study: Study, text: str
) -> None:
    response = browser.post(NEW, {"name": "path", "text": text})
    html = response.content.decode()
    assert response.status_code == 422
    assert "Nothing has been stored" in html
    assert "<script>alert" not in html
    assert not MechanismVersion.objects.exists()
    if "\x00" not in text:
        assert sent_by(response)["text"] == [text]
    check(browser, text)


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("", "mechanism needs a name"),
        (" \t ", "mechanism needs a name"),
        ("x" * 121, "120"),
        ("a\x00b", "Null characters"),
        ("a\nb", ""),
    ],
)
def test_a_name_that_cannot_be_used_is_told_at_the_name(
    browser: Client, study: Study, name: str, says: str
) -> None:
    response = browser.post(NEW, {"name": name, "text": RIGHT})
    assert response.status_code == 422
    assert says in wrong_at(response, "id_name") and wrong_at(response, "id_name")
    assert sent_by(response)["text"] == [RIGHT]
    assert not MechanismVersion.objects.exists()


def test_a_long_note_is_told_at_the_note(browser: Client, study: Study) -> None:
    response = browser.post(NEW, {"name": "n", "text": RIGHT, "note": "x" * 1_000_000})
    assert response.status_code == 422
    assert wrong_at(response, "id_note")


def test_very_many_problems_are_cut_with_their_number(browser: Client, study: Study) -> None:
    html = check(browser, "nonsense\n" * 500)
    assert "more are not shown" in text_of(html)
    assert len(html) < 60_000


def test_the_list_shows_each_mechanism_with_its_newest_version_and_its_fits(
    browser: Client, fitted: Study
) -> None:
    fitted.version("first order", RIGHT + "ketone --k_back--> alcohol\n")
    text = text_of(browser.get(LIST).content.decode())
    assert "first order version 2 mira" in text
    row = text[text.index("first order version 2") :]
    assert row.split("UTC")[1].split()[:2] == ["2", "1"]


def test_an_empty_list_says_what_to_write_first(browser: Client, study: Study) -> None:
    text = text_of(browser.get(LIST).content.decode())
    assert "The first one can be one line" in text
    assert "Write a mechanism" in text


def test_the_list_takes_few_queries_however_long_it_is(browser: Client, study: Study) -> None:
    browser.get(LIST)
    for number in range(60):
        study.version(f"path {number:02}", RIGHT)
    with CaptureQueriesContext(connection) as queries:
        response = browser.get(LIST)
    assert len(queries) <= MOST_QUERIES_OF_A_LIST, [q["sql"][:120] for q in queries]
    assert "path 49" in response.content.decode() and "path 50" not in response.content.decode()
    following = browser.get(f"{LIST}?cursor={response.context['page'].next}").content.decode()
    assert "path 50" in following and "path 59" in following and "path 49" not in following


def test_a_cursor_that_is_none_is_refused_in_words(browser: Client, study: Study) -> None:
    response = browser.get(f"{LIST}?cursor=%00zzz")
    assert response.status_code == 400
    assert "cursor" in response.content.decode()


def test_a_version_shows_its_fits_and_how_many_runs_it_explains(browser: Client, fitted: Study) -> None:
    version = MechanismVersion.objects.get(mechanism__name="first order")
    html = browser.get(f"/versions/{version.pk}/").content.decode()
    text = text_of(html)
    assert "converged agrees 2" in text
    assert f'href="/projects/oxidation/fits/new/?version={version.pk}"' in html
    assert f'href="{NEW}?from={version.pk}"' in html
    assert 'href="/projects/oxidation/evidence/"' in html


def test_readers_see_versions_and_no_buttons_and_are_refused_what_they_send(
    client: Client, study: Study
) -> None:
    version = study.version("path", RIGHT)
    client.force_login(make_member(study.project, "reader", "rhea"))
    for address in (LIST, f"/versions/{version.pk}/"):
        html = client.get(address).content.decode()
        assert "mechanisms/new/" not in html and "fits/new/" not in html
    assert client.get(NEW).status_code == 403
    for address in (NEW, CHECK):
        assert client.post(address, {"name": "x", "text": RIGHT}).status_code == 403
    assert MechanismVersion.objects.count() == 1


def test_strangers_learn_nothing_and_the_anonymous_are_asked_to_log_in(client: Client, study: Study) -> None:
    version = study.version("path", RIGHT)
    addresses = [LIST, NEW, f"/versions/{version.pk}/"]
    for address in addresses:
        assert client.get(address)["Location"].startswith("/login/")
    client.force_login(make_user("stranger"))
    for address in [*addresses, "/versions/999999999999999999999999/"]:
        assert client.get(address).status_code == 404
    assert client.post(CHECK, {"text": RIGHT}, headers=HTMX).status_code == 404


def test_a_text_of_another_project_is_not_taken_over(browser: Client, study: Study) -> None:
    other = make_project(study.user)
    theirs = Study(study.user, other).version("secret", RIGHT)
    assert sent_by(browser.get(f"{NEW}?from={theirs.pk}")).get("text") == [""]
    for asked in ("x", "-1", "9" * 400):
        assert browser.get(f"{NEW}?from={asked}").status_code == 200
