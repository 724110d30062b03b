"""Values that are kept until anything is written."""

from __future__ import annotations

import itertools
from collections.abc import Callable

import pytest

from kinetics_db.projects.services import create_project
from kinetics_db.provenance.remembered import Remembered
from kinetics_db.provenance.selectors import head_of_record
from tests.factories.people import make_user


@pytest.fixture
def counted() -> Callable[[], int]:
    """Makes 1, then 2, and so on: whoever gets the same number twice was given what was kept."""
    return itertools.count(1).__next__


def test_what_was_made_is_kept_while_the_head_stays(counted: Callable[[], int]) -> None:
    kept: Remembered[int] = Remembered(10)
    assert [kept.get("a", head="h1", make=counted) for _ in range(3)] == [1, 1, 1]


def test_another_head_or_another_key_makes_it_anew(counted: Callable[[], int]) -> None:
    kept: Remembered[int] = Remembered(10)
    asked = (("a", "h1"), ("b", "h1"), ("a", "h2"), ("a", "h2"), ("b", "h1"))
    assert [kept.get(key, head=head, make=counted) for key, head in asked] == [1, 2, 3, 3, 2]


def test_what_was_used_least_lately_goes_first(counted: Callable[[], int]) -> None:
    kept: Remembered[int] = Remembered(2)
    assert [kept.get(key, head="h", make=counted) for key in "abacab"] == [1, 2, 1, 3, 1, 4]


def test_before_the_first_entry_nothing_is_kept(counted: Callable[[], int]) -> None:
    kept: Remembered[int] = Remembered(10)
    assert [kept.get("a", head="", make=counted) for _ in range(2)] == [1, 2]


def test_what_fails_is_not_kept(counted: Callable[[], int]) -> None:
    kept: Remembered[int] = Remembered(10)
    with pytest.raises(ZeroDivisionError):
        kept.get("a", head="h", make=lambda: 1 // 0)
    assert kept.get("a", head="h", make=counted) == 1


@pytest.mark.django_db
def test_every_write_moves_the_head() -> None:
    heads = [head_of_record()]
    user = make_user()
    heads.append(head_of_record())
    create_project(user=user, slug="a-study", name="A study")
    heads.append(head_of_record())
    user.time_zone = "Europe/Vienna"
    user.save()
    heads.append(head_of_record())
    assert len(set(heads)) == 4
    assert len(heads[-1]) == 64
