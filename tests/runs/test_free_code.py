"""Codes that a copy could have."""

from __future__ import annotations

import pytest

from kinetics_db.errors import NotFound
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.selectors import free_code
from tests.factories.flow import make_run
from tests.factories.people import make_project, make_user


@pytest.mark.django_db
@pytest.mark.parametrize(
    ("taken", "like", "free"),
    [
        ((), "K12", "K13"),
        (("K13", "K14"), "K12", "K15"),
        (("K13x",), "K12", "K13"),
        ((), "K09", "K10"),
        ((), "K99", "K100"),
        ((), "blank", "blank-1"),
        (("blank-1",), "blank", "blank-2"),
        ((), "x" * 80, "x" * 76 + "-1"),
    ],
)
def test_a_free_code_counts_on(taken: tuple[str, ...], like: str, free: str) -> None:
    project = make_project()
    for code in taken:
        make_run(project.created_by, project.pk, code, {"A": Amount(1.0, "mM")})
    assert free_code(user=project.created_by, project_id=project.pk, like=like) == free


@pytest.mark.django_db
def test_strangers_learn_no_codes() -> None:
    with pytest.raises(NotFound):
        free_code(user=make_user(), project_id=make_project().pk, like="K1")
