"""Reads about one run."""

from __future__ import annotations

from dataclasses import replace

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.errors import NotFound
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import replicates_of, revisions_of, run_sheet
from kinetics_db.runs.services import log_run, revise_run
from tests.factories.people import make_member, make_project, make_user

ENTRY = RunEntry(
    "K01",
    (
        ChargeEntry(Amount(10, "mg"), lot="E-1"),
        ChargeEntry(Amount(1, "mL"), stock="S-1"),
        ChargeEntry(Amount(5, "mM"), compound="ester"),
    ),
    total_volume=Amount(10, "mL"),
)


@pytest.fixture
def run(db: None) -> Run:
    """K01 in its second revision, with a lot, a stock and a compound charged."""
    project = make_project(make_user("mira"))
    user = project.created_by
    enter_compound(user=user, project_id=project.pk, name="ester", molar_mass=200.0)
    enter_lot(user=user, project_id=project.pk, code="E-1", compound="ester")
    make_up_stock(
        user=user,
        project_id=project.pk,
        code="S-1",
        portions=[Portion(1.0, "g", compound="ester")],
        volume=(100.0, "mL"),
    )
    first = log_run(user=user, project_id=project.pk, entry=ENTRY)
    entry = replace(ENTRY, notes="stirred longer")
    return revise_run(user=user, run=first.run, entry=entry, based_on=1, reason="forgotten").run


def owner(run: Run) -> Project:
    return Project.objects.get(pk=run.project_id)


def test_a_sheet_holds_what_the_page_of_a_run_says_in_five_queries(run: Run) -> None:
    user = owner(run).created_by
    with CaptureQueriesContext(connection) as queries:
        sheet = run_sheet(user=user, run_id=run.pk)
        told = [(r.number, r.reason, r.created_by.username) for r in sheet.revisions]
        named = [
            (
                charge.compound_revision and charge.compound_revision.compound.name,
                charge.lot_revision and charge.lot_revision.lot.code,
                charge.stock_revision and charge.stock_revision.stock.code,
            )
            for charge in sheet.charges
        ]
        about = (sheet.run.project.slug, sheet.run.created_by.username, sheet.revision.content["notes"])
        assert (sheet.revision.run, sheet.revision.created_by.username) == (run, "mira")
    assert len(queries) == 5
    assert told == [(2, "forgotten", "mira"), (1, "", "mira")]
    assert named == [("ester", "E-1", None), (None, None, "S-1"), ("ester", None, None)]
    assert about == (owner(run).slug, "mira", "stirred longer")
    assert sheet.is_newest


def test_a_sheet_may_show_an_older_revision(run: Run) -> None:
    sheet = run_sheet(user=owner(run).created_by, run_id=run.pk, number=1)
    assert (sheet.revision.number, sheet.revision.content["notes"], sheet.is_newest) == (1, "", False)
    with pytest.raises(NotFound, match="no revision 3"):
        run_sheet(user=owner(run).created_by, run_id=run.pk, number=3)


def test_revisions_are_listed_without_loading_their_content(run: Run) -> None:
    for revision in revisions_of(run):
        assert "canonical" in revision.get_deferred_fields()


def test_replicates_of_a_run_are_found_by_its_newest_revisions(run: Run) -> None:
    user = owner(run).created_by
    other = log_run(
        user=user, project_id=run.project_id, entry=replace(ENTRY, code="K02", replicate_of="K01")
    )
    assert list(replicates_of(user=user, run=run)) == [other.run]
    revise_run(user=user, run=other.run, entry=replace(ENTRY, code="K02"), based_on=1)
    assert list(replicates_of(user=user, run=run)) == []


@pytest.mark.parametrize("run_id", [0, 10**6, 10**30])
def test_a_run_that_is_not_there_is_not_found(run: Run, run_id: int) -> None:
    with pytest.raises(NotFound):
        run_sheet(user=owner(run).created_by, run_id=run_id)


def test_readers_see_a_sheet_and_strangers_do_not(run: Run) -> None:
    assert run_sheet(user=make_member(owner(run), "reader"), run_id=run.pk).run == run
    stranger = make_user()
    with pytest.raises(NotFound):
        run_sheet(user=stranger, run_id=run.pk)
    with pytest.raises(NotFound):
        replicates_of(user=stranger, run=run)
