"""Finding runs by their conditions, people and dates."""

from __future__ import annotations

from datetime import UTC, datetime

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.accounts.limits import Limits
from kinetics_db.measurements.rows import run_rows
from kinetics_db.measurements.services import supersede_table
from kinetics_db.paging import page_of
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run
from kinetics_db.runs.query import RUN_ORDERS, RunQuery, runs_found
from kinetics_db.runs.services import log_run, revise_run
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_member, make_project, make_user

FILE = lines(["t / s", "A / mM"], [0, 50], [60, 40], [120, 30])


@pytest.fixture
def project(db: None) -> Project:
    """K01..K04 at 50, 100, 150 mM and 100 %, with one control, one replicate and one table."""
    user = make_user("mira")
    project = make_project(user, "tern")
    same = {"total_volume": Amount(10, "mL")}
    first = make_run(user, project.pk, "K01", {"A": Amount(50, "mM")}, temperature=Amount(40, "degC"), **same)
    make_run(
        user,
        project.pk,
        "K02",
        {"A": Amount(100, "mM"), "B": Amount(5, "mM")},
        temperature=Amount(60, "degC"),
        replicate_of="K01",
    )
    make_run(user, project.pk, "k03", {"A": Amount(150, "mM")}, control_kind="blank")
    make_run(user, project.pk, "P04", {"A": Amount(100, "%")}, temperature=Amount(313.15, "K"))
    make_reported_table(user, first, FILE, {"A": "A"})
    return project


def found(project: Project, text: str) -> list[str]:
    runs = runs_found(user=project.created_by, query=RunQuery.from_text(text), project_id=project.pk)
    return sorted(runs.values_list("code", flat=True))


@pytest.mark.parametrize(
    ("text", "codes"),
    [
        ("", ["K01", "K02", "P04", "k03"]),
        ("[A]0 50..150 mM", ["K01", "K02", "k03"]),
        ("[A]0 50 mM..100 mM", ["K01", "K02"]),
        ("[A]0 >= 101 mM", ["k03"]),  # 100 % is not 100 mol/L
        ("[A]0 50 %..", ["P04"]),
        ("[A]0 100 mM", ["K02"]),
        ("[A]0, [B]0", ["K02"]),
        ("[A]0 100 mM, [B]0 <= 4 mM", []),
        ("[C]0", []),
        ("40 degC", ["K01", "P04"]),
        ("T >= 314 K", ["K02"]),
        ("10 mL", ["K01"]),
        ("k0", ["K01", "K02", "k03"]),
        ("%", []),  # a sign that a pattern of the database would take for anything
        ("code _0", []),
        ("control blank", ["k03"]),
        ("control any", ["k03"]),
        ("no control", ["K01", "K02", "P04"]),
        ("replicate of K01", ["K02"]),
        ("has table", ["K01"]),
        ("no table", ["K02", "P04", "k03"]),
        ("by mira, project tern", ["K01", "K02", "P04", "k03"]),
        ("by anna", []),
        ("project other", []),
    ],
)
def test_what_a_line_finds(project: Project, text: str, codes: list[str]) -> None:
    text = 'code "%"' if text == "%" else text
    assert found(project, text) == codes


def test_days_begin_in_the_zone_of_who_asks(project: Project) -> None:
    Run.objects.filter(code="K01").update(created=datetime(2026, 3, 1, 22, 30, tzinfo=UTC))
    Run.objects.exclude(code="K01").update(created=datetime(2026, 2, 1, tzinfo=UTC))
    assert found(project, "after 2026-03-01") == ["K01"]
    assert found(project, "after 2026-03-02") == []
    project.created_by.time_zone = "Europe/Helsinki"  # two hours ahead: there it is half past midnight
    assert found(project, "after 2026-03-02") == ["K01"]
    assert found(project, "before 2026-03-02") == ["K02", "P04", "k03"]
    project.created_by.time_zone = "Nowhere/At All"
    assert found(project, "after 2026-03-01") == ["K01"]


@pytest.mark.parametrize("text", ["after 0001-01-01", "before 9999-12-31"])
@pytest.mark.parametrize("zone", ["UTC", "Pacific/Kiritimati", "Pacific/Pago_Pago"])
def test_the_ends_of_the_calendar_can_be_asked_for(project: Project, text: str, zone: str) -> None:
    project.created_by.time_zone = zone
    assert len(found(project, text)) == 4


def test_a_revision_changes_by_what_a_run_is_found(project: Project) -> None:
    run = Run.objects.get(code="K02")
    entry = RunEntry(
        "K02",
        (ChargeEntry(Amount(70, "mM"), compound="A"),),
        control_kind="without light",
        replicate_of="k03",
    )
    revise_run(user=project.created_by, run=run, entry=entry, based_on=1)
    assert found(project, "control without light, replicate of k03, [A]0 70 mM") == ["K02"]
    assert found(project, "[A]0 100 mM") == found(project, "[B]0") == found(project, "60 degC") == []


def test_only_runs_that_the_person_may_see_are_found(project: Project) -> None:
    other = make_project()
    make_run(other.created_by, other.pk, "X1", {"A": Amount(100, "mM")})
    query = RunQuery.from_text("[A]0 100 mM")
    for user, codes in (
        (project.created_by, ["K02"]),
        (make_member(project, "reader"), ["K02"]),
        (other.created_by, ["X1"]),
        (make_user(), []),
    ):
        assert sorted(runs_found(user=user, query=query).values_list("code", flat=True)) == codes
    assert not runs_found(user=other.created_by, query=query, project_id=project.pk).exists()


def test_a_token_of_one_project_finds_only_runs_of_it(project: Project) -> None:
    user = project.created_by
    second = make_project(user)
    make_run(user, second.pk, "X1", {"A": Amount(100, "mM")})
    query = RunQuery.from_text("[A]0 100 mM")
    assert sorted(runs_found(user=user, query=query).values_list("code", flat=True)) == ["K02", "X1"]
    user.limits = Limits(scope="read", project_id=second.pk, token="laptop")
    assert list(runs_found(user=user, query=query).values_list("code", flat=True)) == ["X1"]


def test_a_page_of_rows_costs_two_queries_and_says_what_a_list_needs(project: Project) -> None:
    user = project.created_by
    with CaptureQueriesContext(connection) as queries:
        page = page_of(
            runs_found(user=user, query=RunQuery(), project_id=project.pk), order=RUN_ORDERS["code"]
        )
        rows = {row.run.code: row for row in run_rows(page.items)}
        told = {
            code: (
                row.run.project.slug,
                row.run.created_by.username,
                row.run.replicate_of,
                row.run.control_kind,
            )
            for code, row in rows.items()
        }
    assert len(queries) == 2
    assert told["K02"] == ("tern", "mira", Run.objects.get(code="K01"), "")
    assert told["k03"] == ("tern", "mira", None, "blank")
    first = rows["K01"]
    assert (first.temperature, first.temperature_u) == (pytest.approx(313.15), 0.0)
    assert [(start.compound, start.value) for start in first.starts] == [("A", pytest.approx(0.05))]
    assert (first.files, first.tables, first.waits, first.table and first.table.rows) == (1, 1, False, 3)
    assert (rows["K02"].files, rows["K02"].tables, rows["K02"].waits, rows["K02"].table) == (0, 0, True, None)
    assert (rows["P04"].basis, rows["P04"].starts[0].value) == ("relative", pytest.approx(100.0))
    assert (rows["k03"].temperature, rows["k03"].temperature_u) == (None, None)


def test_a_row_shows_the_newest_table_that_nothing_supersedes(project: Project) -> None:
    user, run = project.created_by, Run.objects.get(code="K01")
    one = run.concentration_tables.get()
    two = make_reported_table(user, run, FILE + "180,20\n", {"A": "A"}, name="two.csv")
    three = make_reported_table(user, run, FILE + "180,20\n240,10\n", {"A": "A"}, name="three.csv")
    assert [row.table for row in run_rows([run])] == [three]
    supersede_table(user=user, older=one, newer=two, reason="longer")
    (row,) = run_rows([run])
    assert (row.table, row.files, row.tables) == (three, 3, 3)
    assert row.table is not None and row.table.table.to_bytes() == bytes(three.blob)
    known = (row.table.number, row.table.rows, row.table.last_time, row.table.basis)
    assert known == (3, three.rows, three.last_time, "mol/L")
    assert run_rows([run], numbers=False)[0].table is None
    assert run_rows([]) == []


def test_a_run_logged_twice_the_same_way_is_found_as_often_as_it_is(project: Project) -> None:
    entry = RunEntry("K05", tuple(ChargeEntry(Amount(25, "mM"), compound="A") for _ in range(2)))
    log_run(user=project.created_by, project_id=project.pk, entry=entry)
    assert found(project, "[A]0 50 mM") == ["K01", "K05"]
