"""Freezing datasets, and what makes results stale."""

from __future__ import annotations

import pytest

from kinetics_db.datasets.models import Dataset
from kinetics_db.datasets.selectors import staleness_of
from kinetics_db.datasets.services import Window, freeze_dataset
from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.services import supersede_table
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.services import revise_run
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_project

pytestmark = pytest.mark.django_db
FILE = lines(["t / s", "A / mM", "B / mM"], [0, 10, 0], [10, 6, 4], [20, 3.6, 6.4])


@pytest.fixture
def project() -> Project:
    return make_project()


def table_of(project: Project, code: str, text: str = FILE, unit: str = "mM") -> ConcentrationTable:
    user = project.created_by
    run = make_run(user, project.pk, code, {"A": Amount(10.0, unit)})
    names = {"A": "A", "B": "B"}
    return make_reported_table(user, run, text, names, name=f"{code}.csv", constant_u=0.1)


def freeze(project: Project, *tables: ConcentrationTable, **more: object) -> Dataset:
    return freeze_dataset(
        user=project.created_by, project_id=project.pk, name="all", table_ids=[t.pk for t in tables], **more
    )


def test_the_same_choice_is_the_same_dataset(project: Project) -> None:
    one, two = table_of(project, "R-1"), table_of(project, "R-2")
    first = freeze(project, one, two)
    assert freeze(project, one, two).pk == first.pk
    other = freeze(project, one)
    assert (first.number, other.number) == (1, 2)


@pytest.mark.parametrize(
    ("windows", "says"),
    [
        (Window(columns=("C",)), "has no column 'C'"),
        (Window(left_out={"A@9": "spike"}), "is no point"),
        (Window(left_out={"A": "spike"}), "is no point"),
        (Window(left_out={"A@\u00b2": "spike"}), "is no point"),
        (Window(start=5.0, end=1.0), "leaves nothing"),
        (Window(columns=()), "leaves nothing"),
        (Window(start=100.0), "leaves nothing"),
        (Window(left_out={"A@1": " "}), "without a reason"),
    ],
)
def test_a_window_that_cannot_be_meant_is_refused(project: Project, windows: Window, says: str) -> None:
    table = table_of(project, "R-1")
    with pytest.raises(InvalidInput, match=says):
        freeze(project, table, windows={table.pk: windows})
    assert not Dataset.objects.exists()


def test_tables_of_other_projects_and_repeated_tables_are_refused(project: Project) -> None:
    foreign = table_of(make_project(), "R-1")
    mine = table_of(project, "R-1")
    with pytest.raises(InvalidInput, match="no table"):
        freeze(project, mine, foreign)
    with pytest.raises(InvalidInput, match="twice"):
        freeze(project, mine, mine)


def test_relative_and_molar_tables_are_never_mixed(project: Project) -> None:
    percent = lines(["t / s", "A / %", "B / %"], [0, 100, 0], [10, 60, 40])
    with pytest.raises(InvalidInput, match="mixed"):
        freeze(project, table_of(project, "R-1"), table_of(project, "R-2", percent, "%"))


def test_a_run_in_mol_per_litre_does_not_go_with_a_table_in_percent(project: Project) -> None:
    percent = lines(["t / s", "A / %", "B / %"], [0, 100, 0], [10, 60, 40])
    with pytest.raises(InvalidInput, match="charged in mol/L, its table 1 is in percent"):
        freeze(project, table_of(project, "R-1", percent, "mM"))
    assert not Dataset.objects.exists()


def test_a_stranger_learns_nothing_of_a_project(project: Project) -> None:
    table = table_of(project, "R-1")
    with pytest.raises(NotFound):
        freeze_dataset(user=make_project().created_by, project_id=project.pk, name="x", table_ids=[table.pk])


def test_a_dataset_is_stale_once_a_run_is_revised_or_a_table_superseded(project: Project) -> None:
    user = project.created_by
    one, two = table_of(project, "R-1"), table_of(project, "R-2")
    dataset = freeze(project, one, two)
    assert not staleness_of([dataset.pk])[dataset.pk]
    entry = RunEntry("R-1", [ChargeEntry(Amount(11.0, "mM"), compound="A")])
    revise_run(user=user, run=one.run, entry=entry, based_on=1)
    newer = make_reported_table(user, two.run, FILE, {"A": "A"}, name="R-2.csv", constant_u=0.2)
    supersede_table(user=user, older=two, newer=newer, reason="noise was stated too small")
    reasons = staleness_of([dataset.pk])[dataset.pk].reasons
    assert len(reasons) == 2
    assert "run R-1 has been revised" in reasons[0] and "table 1 of run R-2 has been superseded" in reasons[1]
