"""Runs that wait for their file or its reduction."""

from __future__ import annotations

import pytest

from kinetics_db.accounts.limits import Limits
from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.measurements.services import store_file
from kinetics_db.measurements.waiting import RunCounts, run_counts, runs_left_off, waiting_in
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_member, make_project, make_user

pytestmark = pytest.mark.django_db
FILE = lines(("time / s", "A / mM"), (0, 1.0), (1, 0.5))


def run(project: Project, code: str, *, user: User | None = None) -> Run:
    return make_run(user or project.created_by, project.pk, code, {"A": Amount(1, "mM")})


@pytest.fixture
def project() -> Project:
    """R1 is reduced, R2 has a file, R3 and R4 have none."""
    project = make_project()
    make_reported_table(project.created_by, run(project, "R1"), FILE, {"A": "A"}, constant_u=0.01)
    store_file(user=project.created_by, run=run(project, "R2"), name="a.csv", data=FILE.encode())
    run(project, "R3")
    run(project, "R4")
    return project


def test_what_runs_wait_for_is_counted_and_the_newest_are_named(project: Project) -> None:
    found = waiting_in(user=project.created_by, project_id=project.pk, most=2)
    assert (found.for_file, found.for_reduction) == (2, 1)
    assert [(r.code, r.waits_for) for r in found.newest] == [("R4", "file"), ("R3", "file")]
    assert found


def test_a_project_in_which_nothing_waits_says_so() -> None:
    project = make_project()
    make_reported_table(project.created_by, run(project, "R1"), FILE, {"A": "A"}, constant_u=0.01)
    assert not waiting_in(user=project.created_by, project_id=project.pk)


def test_runs_are_counted_only_where_the_person_may_look(project: Project) -> None:
    other = make_project()
    run(other, "X1")
    assert run_counts(user=project.created_by) == {project.pk: RunCounts(runs=4, waiting=3)}
    assert run_counts(user=make_member(project, "reader")) == {project.pk: RunCounts(runs=4, waiting=3)}
    assert run_counts(user=make_user()) == {}
    with pytest.raises(NotFound):
        waiting_in(user=make_user(), project_id=project.pk)


def test_where_one_left_off_is_among_ones_own_runs(project: Project) -> None:
    otto = make_member(project, "contributor", "otto")
    run(project, "R5", user=otto)
    assert [(r.code, r.waits_for) for r in runs_left_off(user=project.created_by)] == [
        ("R4", "file"), ("R3", "file"), ("R2", "reduction"), ("R1", ""),
    ]  # fmt: skip
    assert [r.code for r in runs_left_off(user=project.created_by, most=1)] == ["R4"]
    assert [r.code for r in runs_left_off(user=otto)] == ["R5"]


def test_a_token_for_another_project_counts_nothing_here(project: Project) -> None:
    user = project.created_by
    other = make_project(user)
    user.limits = Limits("read", other.pk, "script")
    assert run_counts(user=user) == {} and runs_left_off(user=user) == []
    with pytest.raises(NotFound):
        waiting_in(user=user, project_id=project.pk)


def test_the_counts_cost_one_and_two_queries(project: Project, django_assert_num_queries: object) -> None:
    user = project.created_by
    with django_assert_num_queries(1):  # type: ignore[operator]
        run_counts(user=user)
    with django_assert_num_queries(3):  # type: ignore[operator]
        waiting_in(user=user, project_id=project.pk)  # the third looks the role up
