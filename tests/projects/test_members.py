"""Giving roles by name, taking them away, and short names of projects."""

from __future__ import annotations

import pytest

from kinetics_db.accounts.limits import Limits
from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted
from kinetics_db.projects.selectors import (
    free_slug,
    members_of,
    project_with_role,
    projects_with_roles,
    role_in,
    roles_remembered,
)
from kinetics_db.projects.services import create_project, give_role, remove_member
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.people import make_member, make_project, make_user

pytestmark = pytest.mark.django_db


def test_a_role_is_given_by_name() -> None:
    project, otto = make_project(), make_user("otto")
    assert give_role(user=project.created_by, project=project, username=" otto ", role="reader").user == otto
    assert role_in(user=otto, project_id=project.pk) == "reader"


@pytest.mark.parametrize("username", ["nobody", "", "a\x00b", "x" * 200])
def test_a_name_that_nobody_has_is_refused_at_its_field(username: str) -> None:
    project = make_project()
    with pytest.raises(InvalidInput) as refused:
        give_role(user=project.created_by, project=project, username=username, role="reader")
    assert refused.value.problems[0].field == "username"


def test_who_is_no_owner_does_not_learn_which_names_there_are() -> None:
    project = make_project()
    for username in ("nobody", project.created_by.username):
        with pytest.raises(NotPermitted):
            give_role(
                user=make_member(project, "contributor"), project=project, username=username, role="reader"
            )
        with pytest.raises(NotFound):
            give_role(user=make_user(), project=project, username=username, role="reader")


def test_a_person_without_a_role_any_more_sees_nothing_and_the_trail_tells() -> None:
    project = make_project()
    otto = make_member(project, "contributor", "otto")
    remove_member(user=project.created_by, project=project, username="otto")
    assert role_in(user=otto, project_id=project.pk) is None
    entry = AuditEntry.objects.latest("sequence")
    assert (entry.verb, entry.record_kind, entry.record_label) == (
        "took role contributor",
        "membership",
        "otto",
    )
    assert entry.project_id == project.pk and entry.user_id == project.created_by_id
    assert chain_breaks() == []


def test_the_last_owner_cannot_be_removed_but_one_of_two_can() -> None:
    project = make_project()
    first = project.created_by
    with pytest.raises(Conflict, match="at least one owner"):
        remove_member(user=first, project=project, username=first.username)
    assert role_in(user=first, project_id=project.pk) == "owner"
    second = make_member(project, "owner")
    remove_member(user=first, project=project, username=first.username)
    assert role_in(user=first, project_id=project.pk) is None
    with pytest.raises(Conflict, match="at least one owner"):
        remove_member(user=second, project=project, username=second.username)


def test_only_owners_remove_and_only_members() -> None:
    project = make_project()
    reader = make_member(project, "reader")
    for role in ("reader", "contributor"):
        with pytest.raises(NotPermitted):
            remove_member(user=make_member(project, role), project=project, username=reader.username)
    with pytest.raises(NotFound):
        remove_member(user=make_user(), project=project, username=reader.username)
    with pytest.raises(InvalidInput, match="has no role"):
        remove_member(user=project.created_by, project=project, username=make_user().username)
    assert role_in(user=reader, project_id=project.pk) == "reader"


def test_a_project_comes_with_the_persons_own_role_in_one_query(django_assert_num_queries: object) -> None:
    project = make_project()
    reader = make_member(project, "reader")
    make_member(project, "contributor")
    with django_assert_num_queries(1), roles_remembered():  # type: ignore[operator]
        found, role = project_with_role(user=reader, slug=project.slug)
        assert (found, role) == (project, "reader")
        assert found.created_by.username
        assert role_in(user=reader, project_id=project.pk) == "reader"
    with pytest.raises(NotFound):
        project_with_role(user=make_user(), slug=project.slug)


def test_projects_come_with_ones_own_role_in_each() -> None:
    first, second = make_project(slug="first"), make_project(slug="second")
    make_project(slug="third")
    user = make_member(first, "reader")
    give_role(user=second.created_by, project=second, username=user.username, role="owner")
    assert [(p.slug, p.role) for p in projects_with_roles(user=user)] == [
        ("first", "reader"),
        ("second", "owner"),
    ]


def test_a_token_that_may_only_read_makes_a_reader_of_an_owner() -> None:
    project, other = make_project(), make_project()
    user = project.created_by
    give_role(user=other.created_by, project=other, username=user.username, role="contributor")
    user.limits = Limits("read", None, "script")
    assert {p.role for p in projects_with_roles(user=user)} == {"reader"}
    user.limits = Limits("write", project.pk, "script")
    assert [(p.slug, p.role) for p in projects_with_roles(user=user)] == [(project.slug, "owner")]


def test_members_are_listed_by_name_for_members_only() -> None:
    project = make_project(make_user("mira"))
    anna = make_member(project, "reader", "anna")
    listed = members_of(user=anna, project=project)
    assert [(m.user.username, m.role) for m in listed] == [("anna", "reader"), ("mira", "owner")]
    with pytest.raises(NotFound):
        members_of(user=make_user(), project=project)


@pytest.mark.parametrize(
    ("name", "slug"),
    [
        ("Oxidation of an alcohol", "oxidation-of-an-alcohol"),
        ("  Été -- 2026_b  ", "ete-2026-b"),
        ("酸化", "project"),
        ("***", "project"),
        ("New", "new-2"),
        ("x" * 500, "x" * 56),
    ],
)
def test_a_short_name_is_made_from_any_name(name: str, slug: str) -> None:
    assert free_slug(name=name) == slug
    assert create_project(user=make_user(), slug=slug, name="A study").slug == slug


def test_a_short_name_that_is_taken_gets_a_number() -> None:
    for slug in ("tern", "tern-2", "tern-4"):
        make_project(slug=slug)
    assert free_slug(name="Tern") == "tern-3"


def test_a_project_cannot_take_the_address_of_a_page() -> None:
    with pytest.raises(InvalidInput, match="a page of its own"):
        create_project(user=make_user(), slug="new", name="New")
