"""Instrument files on pages: what is understood is seen before anything is stored."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import pytest
from django.conf import settings
from django.core.files.uploadedfile import SimpleUploadedFile
from django.test import Client
from django.urls import reverse

from kinetics_db.measurements.models import InstrumentFile, SignalTable
from kinetics_db.projects.services import set_member
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import make_run
from tests.factories.people import make_member, make_project, make_user
from tests.web.study import Study

GOOD = b"t / min;A / mM;B / mM\n0;100,5;0\n1;90;10,25\n2;80;20\n3;70;30\n"
DOUBTFUL = b"t / min;A / mM\n0;1,500\n1;1,250\n"
REMARKS = b"t / s,A / mM,remark\n0,1,start\n1,2,cloudy\n"


@pytest.fixture(autouse=True)
def _own_byte_store(settings: Any, tmp_path: Path) -> None:
    settings.BYTE_STORE_DIR = tmp_path / "bytes"


@pytest.fixture
def run(study: Study) -> Run:
    return make_run(study.user, study.project.pk, "K07", {"A": Amount(100.0, "mM")})


def address(run: Run) -> str:
    return reverse("web:new-file", args=[run.pk])


def choose(browser: Client, run: Run, data: bytes, name: str = "K07.csv", **more: str) -> Any:
    return browser.post(address(run), {"file": SimpleUploadedFile(name, data), **more})


def token_in(response: Any) -> str:
    found = re.search(r'name="held" value="([^"]+)"', response.content.decode())
    assert found is not None, response.content.decode()
    return found[1]


def sent_again(response: Any, **changes: str) -> dict[str, str]:
    """The form as a browser would send it, with some fields changed; None takes one out."""
    attempt = response.context["attempt"]
    fields = {"held": token_in(response)}
    for bound in attempt.form:
        value = bound.value()
        if value not in (None, False, ""):
            fields[bound.html_name] = "on" if value is True else str(value)
        elif bound.name != "sort_times":
            fields[bound.html_name] = ""
    for number, row in attempt.rows.shown:
        fields |= {f"column-{number}-{part}": getattr(row, part) for part in ("found", "name", "unit")}
        if row.left_out:
            fields[f"column-{number}-out"] = "on"
    return fields | changes


def nothing_is_recorded() -> bool:
    return not InstrumentFile.objects.exists() and not SignalTable.objects.exists()


def test_what_is_understood_is_shown_before_anything_is_stored(browser: Client, run: Run) -> None:
    entries = AuditEntry.objects.count()
    response = choose(browser, run, GOOD)
    text = response.content.decode()
    assert response.status_code == 200
    assert "columns are separated by semicolons" in text and "decimal sign: comma" in text
    assert "4 rows, from 0 to 180 s" in text and "100.5" in text and "10.25" in text
    assert '<figure class="chart"' in text
    assert nothing_is_recorded() and AuditEntry.objects.count() == entries


def test_storing_keeps_the_bytes_as_they_came_and_lets_the_held_ones_go(browser: Client, run: Run) -> None:
    shown = choose(browser, run, GOOD)
    stored = browser.post(address(run), sent_again(shown, do="store"))
    table = SignalTable.objects.get()
    assert stored.status_code == 302 and stored["Location"] == reverse("web:signals", args=[table.pk])
    assert table.file.name == "K07.csv" and table.rows == 4
    original = browser.get(reverse("web:file", args=[table.file_id]))
    assert original.content == GOOD
    assert not list((Path(settings.BYTE_STORE_DIR) / "incoming").iterdir())


def test_a_file_that_can_be_read_in_two_ways_is_settled_without_choosing_it_again(
    browser: Client, run: Run
) -> None:
    refused = choose(browser, run, DOUBTFUL)
    text = refused.content.decode()
    assert refused.status_code == 422 and "can be a decimal comma or a thousands separator" in text
    assert '<th scope="row" class="num">2 <span class="word">wrong</span></th>' in text and "0;1,500" in text
    assert refused.context["form"].errors.keys() == {"decimal"}
    settled = browser.post(address(run), sent_again(refused, decimal=",", do="preview"))
    assert settled.status_code == 200
    browser.post(address(run), sent_again(settled, do="store"))
    assert SignalTable.objects.get().reader_options == {"decimal": ","}


def test_a_column_of_words_is_left_out_and_another_gets_name_and_unit(browser: Client, run: Run) -> None:
    refused = choose(browser, run, REMARKS)
    assert refused.status_code == 422
    assert "&#x27;start&#x27; in column &#x27;remark&#x27; is not a number" in refused.content.decode()
    changes = {"column-2-out": "on", "column-1-name": "amine", "column-1-unit": "umol/L", "do": "store"}
    browser.post(address(run), sent_again(refused, **changes))
    table = SignalTable.objects.get()
    assert table.reader_options == {
        "columns": ["t", "amine", "remark"],
        "units": {"amine": "umol/L"},
        "ignored_columns": ["remark"],
    }
    assert [(c.name, c.unit) for c in table.table.columns] == [("t", "s"), ("amine", "umol/L")]


def test_htmx_gets_the_part_that_changes(browser: Client, run: Run) -> None:
    shown = choose(browser, run, GOOD)
    part = browser.post(
        address(run), sent_again(shown, do="preview", time_unit="h"), headers={"HX-Request": "true"}
    )
    text = part.content.decode()
    assert text.lstrip().startswith('<div id="reading">') and "<html" not in text
    assert "its numbers in h" in text


def test_an_earlier_reading_is_used_for_a_file_that_looks_alike(
    browser: Client, study: Study, run: Run
) -> None:
    first = choose(browser, run, DOUBTFUL, "K07.csv")
    browser.post(address(run), sent_again(first, decimal=",", do="store"))
    other = make_run(study.user, study.project.pk, "K08", {"A": Amount(100.0, "mM")})
    alike = choose(browser, other, DOUBTFUL.replace(b"250", b"125"), "K08.csv")
    text = alike.content.decode()
    assert alike.status_code == 200 and "Read like the file <bdi>K07.csv</bdi> of run K07" in text
    assert alike.context["form"]["decimal"].value() == ","


def test_an_earlier_reading_is_only_offered_where_other_columns_come_out(
    browser: Client, study: Study, run: Run
) -> None:
    first = choose(browser, run, DOUBTFUL, "K07.csv")
    browser.post(address(run), sent_again(first, decimal=",", do="store"))
    other = choose(browser, run, b"t / min;X / a.u.;Y / a.u.\n0;1,5;2\n1;1,25;3\n", "peaks.csv")
    assert other.context["like"] is None and len(other.context["offered"]) == 1
    asked = {
        "held": token_in(other),
        "name": "peaks.csv",
        "like": str(other.context["offered"][0].pk),
        "do": "like",
    }
    taken = browser.post(address(run), asked)
    assert taken.context["form"]["decimal"].value() == "," and taken.status_code == 200


def test_earlier_readings_of_other_projects_are_not_offered(browser: Client, study: Study, run: Run) -> None:
    first = choose(browser, run, DOUBTFUL)
    browser.post(address(run), sent_again(first, decimal=",", do="store"))
    stranger = Client()
    foreign = make_user("vega")
    project = make_project(foreign)
    theirs = make_run(foreign, project.pk, "K07", {"A": Amount(1.0, "mM")})
    stranger.force_login(foreign)
    assert not choose(stranger, theirs, GOOD).context["offered"]


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"", "the file is empty"),
        (b"\x00\x01\x02" * 200, "binary or damaged"),
        (b"PK\x03\x04" + b"\x00" * 40, "spreadsheet workbook"),
        (b"\xff\xfe\x00", "cut short"),
        (b"t / s,A\n0,1e400\n", "too large for a number"),
        (b"t / s,A\n0,=1+1\n", "is a formula"),
        (b"t / s,A\n0,1\n" + b"9" * 300_000, "the line is too long"),
        (b"just a letter\nto nobody\n", "no rows of numbers were found"),
        (b"t / s,<script>alert(1)</script>\n0,x\n", "&lt;script&gt;"),
    ],
)
def test_a_file_that_cannot_be_read_says_why_and_leaves_nothing(
    browser: Client, run: Run, data: bytes, says: str
) -> None:
    refused = choose(browser, run, data)
    text = refused.content.decode()
    assert refused.status_code == 422
    assert says in text.lower() and "<script>alert" not in text
    assert nothing_is_recorded()


def test_markup_in_a_header_is_shown_as_text(browser: Client, run: Run) -> None:
    shown = choose(browser, run, b"t / s,<b>A</b> / mM\n0,1\n1,2\n", "<i>x</i>.csv")
    text = shown.content.decode()
    assert shown.status_code == 200
    assert "<b>A</b>" not in text and "&lt;b&gt;A" in text and "<i>" not in text


@pytest.mark.parametrize(
    "name",
    [
        'a"; filename="b.csv',
        "../../etc/passwd",
        "c:\\data\\x.csv",
        "\u202egnp.csv",
        "\U0001f9ea.csv",
        "x" * 10_000,
    ],
)
def test_any_file_name_that_comes_in_is_kept_safely(browser: Client, run: Run, name: str) -> None:
    shown = choose(browser, run, GOOD, name)
    assert shown.status_code == 200
    stored = browser.post(address(run), sent_again(shown, do="store"))
    assert stored.status_code == 302
    file = InstrumentFile.objects.get()
    assert "/" not in file.name and "\\" not in file.name and len(file.name) <= 255
    header = browser.get(reverse("web:file", args=[file.pk]))["Content-Disposition"]
    assert header.startswith("attachment") and "\u202e" not in header and "%E2%80%AE" not in header


@pytest.mark.parametrize(
    ("field", "value", "says"),
    [
        ("name", "", "needs a name"),
        ("name", "a/b.csv", "is a path"),
        ("name", "x" * 300, "at most 255"),
        ("encoding", "klingon", "unknown encoding"),
        ("encoding", "x" * 1_000_000, "unknown encoding"),
        ("delimiter", "<b>", "unknown delimiter"),
        ("header_line", "first", "is no line number"),
        ("header_line", "1e400", "is no line number"),
        ("header_line", "999999", "no line 999999"),
        ("time_unit", "mM", "is no unit of time"),
        ("time_unit", "\x00", "null characters"),
        ("time_column", "<script>", "there is no column"),
        ("time_format", "12", "unknown form of time"),
        ("decimal", "5", "unknown decimal sign"),
    ],
)
def test_a_wrong_option_stands_at_its_field_with_what_was_typed(
    browser: Client, run: Run, field: str, value: str, says: str
) -> None:
    shown = choose(browser, run, GOOD)
    refused = browser.post(address(run), sent_again(shown, do="store", **{field: value}))
    assert refused.status_code == 422
    assert says in str(refused.context["form"].errors[field]).lower()
    assert refused.context["form"][field].value() == value
    assert "<script>" not in re.sub(
        r'<script (?:defer|type="(?:module|application/json)")', "", refused.content.decode()
    )
    assert nothing_is_recorded()


def test_a_wrong_unit_or_a_double_name_stands_above_the_columns(browser: Client, run: Run) -> None:
    shown = choose(browser, run, GOOD)
    refused = browser.post(address(run), sent_again(shown, do="store", **{"column-1-unit": "parsecs^"}))
    assert refused.status_code == 422 and "Unknown unit" in refused.context["attempt"].rows.problems[0]
    assert 'value="parsecs^"' in refused.content.decode()
    double = browser.post(address(run), sent_again(shown, do="store", **{"column-1-name": "B"}))
    assert "are both called" in double.context["attempt"].rows.problems[0]


def test_a_post_without_a_file_asks_for_one(browser: Client, run: Run) -> None:
    response = browser.post(address(run), {})
    assert response.status_code == 422 and "No file is chosen" in response.content.decode()


@pytest.mark.parametrize("token", ["gone" * 8, "../../secret_key", "\x00", "x" * 100_000])
def test_what_is_not_held_is_asked_for_again_and_the_options_stay(
    browser: Client, run: Run, token: str
) -> None:
    shown = choose(browser, run, GOOD)
    lost = browser.post(address(run), sent_again(shown, do="store", time_unit="h", held=token))
    assert lost.status_code == 422
    assert "Choose it again" in lost.content.decode() and lost.context["form"]["time_unit"].value() == "h"
    fields = {name: value for name, value in sent_again(shown, time_unit="h").items() if name != "held"}
    again = browser.post(address(run), {**fields, "file": SimpleUploadedFile("new.csv", GOOD)})
    assert again.status_code == 200 and "its numbers in h" in again.content.decode()


def test_what_one_person_holds_is_nobody_elses(browser: Client, study: Study, run: Run) -> None:
    shown = choose(browser, run, GOOD)
    colleague = make_member(study.project, "contributor", "noor")
    other = Client()
    other.force_login(colleague)
    assert other.post(address(run), sent_again(shown, do="store")).status_code == 422
    elsewhere = make_run(study.user, study.project.pk, "K09", {"A": Amount(1.0, "mM")})
    assert browser.post(address(elsewhere), sent_again(shown, do="store")).status_code == 422
    assert nothing_is_recorded()


def test_a_file_beyond_the_limit_is_refused_in_words_and_not_kept(
    browser: Client, run: Run, settings: Any
) -> None:
    settings.MAX_FILE_BYTES = 1000
    refused = choose(browser, run, b"t,A\n" + b"0,1\n" * 60_000)
    assert refused.status_code == 413 and "at most 1,000 bytes" in refused.content.decode()
    incoming = Path(settings.BYTE_STORE_DIR) / "incoming"
    assert not incoming.exists() or not list(incoming.iterdir())


def test_readers_are_refused_and_strangers_find_nothing(study: Study, run: Run) -> None:
    client = Client()
    reader = make_member(study.project, "reader", "ada")
    client.force_login(reader)
    assert client.get(address(run)).status_code == 403
    assert choose(client, run, GOOD).status_code == 403
    client.force_login(make_user("nobody"))
    assert client.get(address(run)).status_code == 404
    assert choose(client, run, GOOD).status_code == 404
    client.logout()
    assert client.get(address(run))["Location"].startswith("/login/")
    set_member(user=study.user, project=study.project, member=reader, role="contributor")
    client.force_login(reader)
    assert choose(client, run, GOOD).status_code == 200


def test_original_bytes_are_a_private_attachment_that_is_asked_for_once(browser: Client, run: Run) -> None:
    browser.post(address(run), sent_again(choose(browser, run, GOOD, "été.csv"), do="store"))
    where = reverse("web:file", args=[InstrumentFile.objects.get().pk])
    response = browser.get(where)
    assert response["Content-Type"] == "application/octet-stream"
    assert response["X-Content-Type-Options"] == "nosniff"
    assert response["Content-Disposition"] == "attachment; filename*=utf-8''%C3%A9t%C3%A9.csv"
    assert "private" in response["Cache-Control"] and "immutable" in response["Cache-Control"]
    again = browser.get(where, headers={"If-None-Match": response["ETag"]})
    assert again.status_code == 304 and not again.content
    stranger = Client()
    stranger.force_login(make_user("nobody"))
    assert stranger.get(where).status_code == 404
