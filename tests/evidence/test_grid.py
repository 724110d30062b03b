"""Parts of the evidence grid."""

from __future__ import annotations

import pytest

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.errors import NotFound
from kinetics_db.evidence.selectors import grid_columns, grid_of, tried_run_ids
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.services import write_version
from kinetics_db.runs.models import Run
from tests.factories.flow import compute_now
from tests.factories.people import make_member, make_user
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db


def fit(study: SmallStudy, name: str, text: str) -> Fit:
    version = write_version(user=study.user, project_id=study.project.pk, name=name, text=text)
    asked = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=version,
        constants=[Constant("k", start=0.003)],
    )
    compute_now(asked)
    return asked


@pytest.fixture
def study() -> SmallStudy:
    """Two runs under two mechanisms, one of them in two versions."""
    study = make_study()
    fit(study, "one step", "A --k--> B")
    fit(study, "two at once", "2 A --k--> 2 B")
    fit(study, "one step", "A --k--> B\nB --k--> A")
    return study


def test_columns_are_in_order_and_compared_with_all_others(study: SmallStudy) -> None:
    found = grid_columns(user=study.user, project_id=study.project.pk)
    assert [c.mechanism for c in found.columns] == ["one step v1", "one step v2", "two at once v1"]
    assert found.mechanisms == ("one step", "two at once") and found.left_out == 0
    assert min(c.delta_aicc for c in found.columns if c.delta_aicc is not None) == 0.0
    assert found.columns == tuple(grid_of(user=study.user, project_id=study.project.pk).columns)
    assert {c.origin.asked_by for c in found.columns if c.origin} == {study.user.username}


def test_the_newest_columns_or_those_of_one_mechanism_can_be_chosen(study: SmallStudy) -> None:
    scope = {"user": study.user, "project_id": study.project.pk}
    whole = {c.mechanism: c for c in grid_columns(**scope).columns}
    newest = grid_columns(**scope, most=2)
    assert [c.mechanism for c in newest.columns] == ["one step v2", "two at once v1"] and newest.left_out == 1
    one = grid_columns(**scope, mechanism="one step")
    assert [c.mechanism for c in one.columns] == ["one step v1", "one step v2"] and one.left_out == 0
    for column in (*newest.columns, *one.columns):
        assert column == whole[column.mechanism], "what is left out still counts in the comparison"
    assert grid_columns(**scope, mechanism="nothing").columns == ()


def test_a_grid_of_some_runs_holds_only_those(study: SmallStudy) -> None:
    scope = {"user": study.user, "project_id": study.project.pk}
    first = Run.objects.get(code="R-1")
    columns = grid_columns(**scope, most=1).columns
    part, whole = grid_of(**scope, run_ids=[first.pk], columns=columns), grid_of(**scope)
    assert part.runs == ("R-1",) and whole.runs == ("R-1", "R-2")
    assert dict(part.cells) == {("R-1", columns[0].fit_id): whole.cells["R-1", columns[0].fit_id]}
    assert len(whole.cells) == 6
    assert not grid_of(**scope, run_ids=[]).cells


def test_runs_of_another_project_are_never_in_a_grid(study: SmallStudy) -> None:
    other = make_study()
    fit(other, "one step", "A --k--> B")
    columns = grid_columns(user=other.user, project_id=other.project.pk).columns
    scope = {"user": study.user, "project_id": study.project.pk}
    ids = list(Run.objects.values_list("pk", flat=True))
    assert grid_of(**scope, run_ids=ids, columns=columns).cells == {}
    assert grid_of(**scope, run_ids=ids).runs == ("R-1", "R-2")


def test_tried_runs_are_those_with_a_verdict(study: SmallStudy) -> None:
    columns = grid_columns(user=study.user, project_id=study.project.pk).columns
    assert Run.objects.filter(pk__in=tried_run_ids(columns)).count() == 2
    assert Run.objects.filter(pk__in=tried_run_ids([])).count() == 0


def test_readers_see_the_columns_and_strangers_nothing(study: SmallStudy) -> None:
    reader = make_member(study.project, "reader")
    assert len(grid_columns(user=reader, project_id=study.project.pk).columns) == 3
    with pytest.raises(NotFound):
        grid_columns(user=make_user(), project_id=study.project.pk)
    with pytest.raises(NotFound):
        grid_of(user=make_user(), project_id=study.project.pk, run_ids=[], columns=[])
