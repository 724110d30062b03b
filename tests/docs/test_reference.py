"""Lists in the reference hold what the code holds, neither more nor less."""

from __future__ import annotations

import json
import re
from dataclasses import fields

import pytest
from django.conf import settings
from django.test import Client

import api.urls
from api.errors import MOST_PROBLEMS, STATUS, problem_details
from api.negotiation import MOST_IN_JSON
from api.parsers import DEEPEST
from api.schema import MEANINGS
from api.simulate import MOST_SPECIES, MOST_TIMES, MOST_VALUES, SECONDS
from kinetics_db.accounts.idempotency import KEPT
from kinetics_db.accounts.services import LONGEST_LIFE
from kinetics_db.engine.calibration import AsReported, InternalStandard, MeasuredSignal, ReportedColumn
from kinetics_db.engine.fitting.problem import Constant, Settings
from kinetics_db.engine.reading.options import DELIMITERS, ENCODINGS, ReadingOptions
from kinetics_db.engine.run_evidence import FROM_BEST_TO_WORST, Thresholds
from kinetics_db.engine.units import STORED_UNITS
from kinetics_db.errors import InvalidInput
from kinetics_db.jobs.models import Job
from kinetics_db.materials.services import enter_compound
from kinetics_db.paging import LARGEST_SIZE, SIZE
from kinetics_db.runs.entry import CONTROL_KINDS, SECTIONS, Amount, ChargeEntry, RunEntry
from kinetics_db.runs.query_params import PARAMETERS
from kinetics_db.runs.services import log_run
from tests.docs.fences import DOCS, ROOT, blocks_in_docs
from tests.docs.messages import messages_in
from tests.factories.people import make_project

REFERENCE = DOCS / "reference"


def text_of(name: str) -> str:
    return (REFERENCE / name).read_text(encoding="utf-8")


def section(name: str, heading: str) -> str:
    """Text of a page from a heading to the next one of the same or a higher level."""
    marks, _, _ = heading.partition(" ")
    after = text_of(name).split(f"\n{heading}\n", 1)[1]
    return re.split(rf"^#{{1,{len(marks)}}} ", after, maxsplit=1, flags=re.MULTILINE)[0]


def first_cells(text: str) -> list[str]:
    """What stands in backticks in the first cell of each row of the tables."""
    rows = [line for line in text.splitlines() if line.startswith("| `")]
    return [name for row in rows for name in re.findall(r"`([^`]+)`", row.split(" | ")[0])]


def test_every_environment_variable_of_the_settings_is_documented_and_no_other() -> None:
    modules = [
        *(ROOT / "kinetics_db" / "config").rglob("*.py"),
        *(ROOT / "api").rglob("*.py"),
        *(ROOT / "workers").rglob("*.py"),
        ROOT / "manage.py",
    ]
    used = {v for m in modules for v in re.findall(r"\bRATEWRIGHT_[A-Z_]+\b", m.read_text(encoding="utf-8"))}
    documented = set(first_cells(section("settings.md", "## Environment variables")))
    assert documented == used


def test_documented_defaults_of_the_environment_are_those_of_the_settings() -> None:
    base = (ROOT / "kinetics_db" / "config" / "settings" / "base.py").read_text(encoding="utf-8")
    documented = section("settings.md", "## Environment variables")
    for name in (
        "RATEWRIGHT_JOB_LEASE_SECONDS",
        "RATEWRIGHT_JOB_RESEND_AFTER_SECONDS",
        "RATEWRIGHT_LOG_LEVEL",
    ):
        (default,) = re.findall(rf'"{name}", "?(\w+)"?\)', base)
        assert re.search(rf"\| `{name}` \| all \| `?{default}`? \|", documented), name
    assert (
        "| 209715200 (200 MiB) |" in documented and '"RATEWRIGHT_MAX_FILE_BYTES", 200 * 1024 * 1024)' in base
    )


def test_every_reading_option_encoding_and_delimiter_is_documented() -> None:
    options = section("instrument-files.md", "## Options")
    assert first_cells(options) == [f.name for f in fields(ReadingOptions)]
    listed = options.split("Encodings that can be stated:")[1].strip().rstrip(".")
    assert tuple(re.split(r",\s+", listed)) == ENCODINGS
    assert all(f'`"{name}"`' in options for name in DELIMITERS)


def test_every_refusal_of_the_reader_is_documented_and_no_other() -> None:
    in_code = {m for m in messages_in(ROOT / "kinetics_db" / "engine" / "reading") if " " in m}
    parts = {"several columns could be", "no column is named as"}  # of the message about the time
    page = section("instrument-files.md", "## Refusals")
    in_docs = {re.sub(r"\s+", " ", m) for m in re.findall(r"`([^`]+)`", page) if " " in m}
    assert in_docs - in_code == set(), "in the reference, but not in the code"
    assert in_code - in_docs - parts == set(), "in the code, but not in the reference"


@pytest.mark.parametrize(
    ("heading", "kinds"),
    [
        ("## `internal standard`", (InternalStandard, MeasuredSignal)),
        ("## `as reported`", (AsReported,)),
    ],
)
def test_every_field_of_a_recipe_is_documented(heading: str, kinds: tuple[type, ...]) -> None:
    documented = first_cells(section("reductions.md", heading))
    assert sorted(documented) == sorted(f.name for kind in kinds for f in fields(kind))


def test_every_field_of_a_reported_column_is_documented() -> None:
    page = section("reductions.md", "## `as reported`")
    assert all(f"`{f.name}`" in page for f in fields(ReportedColumn))


def test_fields_of_constants_and_settings_of_a_fit_are_documented_with_their_defaults() -> None:
    constants = first_cells(section("fits-and-verdicts.md", "### Constants"))
    assert sorted(constants) == sorted(f.name for f in fields(Constant))
    settings = section("fits-and-verdicts.md", "### Settings")
    assert sorted(first_cells(settings)) == sorted(f.name for f in fields(Settings))
    for name, shown in re.findall(r"^\| `(\w+)` \| `?([^|`]+?)`? \|", settings, re.MULTILINE):
        default = getattr(Settings(), name)
        assert shown == default if isinstance(default, str) else float(shown.replace(",", "")) == default, (
            name
        )


def test_thresholds_and_verdicts_are_documented_as_they_are() -> None:
    evidence = section("fits-and-verdicts.md", "## Evidence")
    shown: dict[str, float] = {}
    for names, value in re.findall(r"^\| ((?:`\w+`(?:, )?)+) \| ([\d.]+) \|", evidence, re.MULTILINE):
        shown |= dict.fromkeys(re.findall(r"`(\w+)`", names), float(value))
    assert shown == {f.name: float(getattr(Thresholds(), f.name)) for f in fields(Thresholds)}
    assert set(re.findall(r"^\| \*([a-z ]+)\* \|", evidence, re.MULTILINE)) == set(FROM_BEST_TO_WORST)


def test_states_of_a_job_are_documented() -> None:
    page = (DOCS / "explanation" / "background-work.md").read_text(encoding="utf-8")
    assert [state.value for state in Job.State] == re.findall(
        r"^\| (waiting|running|done|stopped|failed|crashed) \|", page, re.MULTILINE
    )


@pytest.mark.django_db
def test_fields_of_a_run_revision_are_documented() -> None:
    project = make_project()
    entry = RunEntry(code="R-1", charges=[ChargeEntry(Amount(10.0, "%"), compound="A")])
    enter_compound(user=project.created_by, project_id=project.pk, name="A")
    content = log_run(user=project.created_by, project_id=project.pk, entry=entry).content
    listed = first_cells(text_of("run-snapshot.md").split("\n## ")[0])
    assert set(content) - {"entered"} == {name for name in listed if not name.startswith("entered.")}
    assert {f"entered.{name}" for name in content["entered"]} == {
        n for n in listed if n.startswith("entered.")
    }
    assert set(first_cells(section("run-snapshot.md", "## Start"))) == set(content["start"][0])
    assert all(f"`{name}`" in text_of("run-snapshot.md") for name in content["entered"]["charges"][0])


def test_sections_and_controls_of_a_run_are_documented_with_their_units() -> None:
    page = section("run-snapshot.md", "## Sections")
    rows = {row.split("`")[1]: row.split(" | ", 1)[1] for row in page.splitlines() if row.startswith("| `")}
    assert set(rows) == set(SECTIONS)
    for name, entries in SECTIONS.items():
        units = [
            f"`{entry}`" if kind == "text" else f"`{entry}` ({kind}, {STORED_UNITS.get(kind, 'as typed')})"
            for entry, kind in entries.items()
        ]
        assert rows[name].rstrip(" |") == ", ".join(units)
    assert all(f"`{kind}`" in text_of("run-snapshot.md") for kind in CONTROL_KINDS if kind)


def test_every_request_of_rest_is_documented_and_no_other() -> None:
    served = {
        (method.upper(), re.sub(r"<(?:\w+:)?(\w+)>", r"{\1}", str(pattern.pattern)))
        for pattern in api.urls.urlpatterns
        if pattern.name != "elsewhere"
        for method in pattern.callback.cls.http_method_names
        if method not in ("head", "options") and hasattr(pattern.callback.cls, method)
    }
    rows = re.findall(r"^\| `([A-Z]+) ([^`]+)` \| \S", text_of("rest.md"), re.MULTILINE)
    assert len(rows) == len(set(rows)) and set(rows) == served


def test_every_status_that_a_request_may_be_refused_with_is_documented() -> None:
    documented = {
        int(s) for s in re.findall(r"^\| (\d{3}) \|", section("rest.md", "## Errors"), re.MULTILINE)
    }
    assert documented == {*(status for status, _ in STATUS.values()), *MEANINGS, 405, 406, 500}


def test_filters_limits_and_rates_of_rest_are_documented_as_they_are() -> None:
    page = text_of("rest.md")
    filters = page.split("Filters of `GET runs/`, all of which must hold:")[1].split(" `order` is")[0]
    assert set(re.findall(r"`(\w+)`", filters)) == set(PARAMETERS)
    flat = re.sub(r"\s+", " ", page)
    base = (ROOT / "kinetics_db" / "config" / "settings" / "base.py").read_text(encoding="utf-8")
    rates = dict(re.findall(r'"RATEWRIGHT_API_(\w+)_A_MINUTE", (\d+)\)', base))
    for shown in (
        f"{rates['REQUESTS']} requests a minute for a person and {rates['ANONYMOUS']} for an address",
        f"at most {LONGEST_LIFE.days} days",
        f"at most {settings.DATA_UPLOAD_MAX_MEMORY_SIZE // 2**20} MiB",
        f"{SIZE} rows or `?size=` 1 to {LARGEST_SIZE}",
        f"within {KEPT.days} days",
        f"depth beyond {DEEPEST}",
        f"up to {MOST_TIMES} `times`",
        f"At most {MOST_SPECIES} species and {MOST_VALUES:,} values",
        f"up to {MOST_IN_JSON // 10**6} million values",
    ):
        assert shown in flat, shown
    assert SECONDS == 10.0 and "It may last ten seconds" in flat
    assert MOST_PROBLEMS == 100 and "the first hundred" in flat


@pytest.mark.django_db
def test_the_problem_details_shown_are_those_of_such_an_error() -> None:
    project = make_project()
    enter_compound(user=project.created_by, project_id=project.pk, name="A")
    charges = [ChargeEntry(Amount(0.1, "M"), compound="A"), ChargeEntry(Amount(1.0, "mL"), stock="amine B")]
    with pytest.raises(InvalidInput) as refused:
        log_run(user=project.created_by, project_id=project.pk, entry=RunEntry(code="R-1", charges=charges))
    response = problem_details(refused.value, {})
    assert response is not None
    assert response.data == json.loads(shown_as_json("title"))


@pytest.mark.django_db
def test_the_answer_about_health_is_the_one_shown(client: Client) -> None:
    assert client.get("/api/v1/health/").json() == json.loads(shown_as_json("open_jobs"))


def shown_as_json(key: str) -> str:
    (block,) = [b for b in blocks_in_docs("json") if f'"{key}"' in b.text]
    return block.text
