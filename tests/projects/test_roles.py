"""Projects, members, roles; accounts."""

from __future__ import annotations

import pytest
from django.core.management import call_command

from kinetics_db.accounts.services import create_user, ensure_user, set_password
from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted
from kinetics_db.projects.selectors import (
    project_named,
    projects_visible_to,
    require_contributor,
    require_owner,
    require_reader,
)
from kinetics_db.projects.services import create_project, set_member, set_verdict_thresholds
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.people import make_member, make_project, make_user

pytestmark = pytest.mark.django_db

ALLOWED = {
    "reader": {"read"},
    "contributor": {"read", "write"},
    "owner": {"read", "write", "own"},
}
GUARDS = {"read": require_reader, "write": require_contributor, "own": require_owner}


@pytest.mark.parametrize("what", GUARDS)
@pytest.mark.parametrize("role", ALLOWED)
def test_a_role_may_do_what_it_may_and_no_more(role: str, what: str) -> None:
    project = make_project()
    member = make_member(project, role)
    if what in ALLOWED[role]:
        GUARDS[what](user=member, project_id=project.pk)
    else:
        with pytest.raises(NotPermitted, match=f"yours is '{role}'"):
            GUARDS[what](user=member, project_id=project.pk)


@pytest.mark.parametrize("what", GUARDS)
def test_an_owner_of_another_project_may_not_even_know(what: str) -> None:
    project, stranger = make_project(), make_project().created_by
    with pytest.raises(NotFound):
        GUARDS[what](user=stranger, project_id=project.pk)
    with pytest.raises(NotFound):
        project_named(user=stranger, slug=project.slug)
    assert project not in projects_visible_to(stranger)


def test_a_project_keeps_an_owner() -> None:
    project = make_project()
    with pytest.raises(Conflict, match="at least one owner"):
        set_member(user=project.created_by, project=project, member=project.created_by, role="reader")
    other = make_member(project, "owner")
    set_member(user=other, project=project, member=project.created_by, role="reader")


def test_only_owners_give_roles_and_only_known_ones() -> None:
    project = make_project()
    with pytest.raises(NotPermitted):
        set_member(
            user=make_member(project, "contributor"), project=project, member=make_user(), role="reader"
        )
    with pytest.raises(InvalidInput, match="reader, contributor, owner"):
        set_member(user=project.created_by, project=project, member=make_user(), role="king")


@pytest.mark.parametrize("slug", ["", "With Capital", "a--b", "-a", "ä", "x" * 61, "a\n"])
def test_a_short_name_is_plain(slug: str) -> None:
    with pytest.raises(InvalidInput, match="short name"):
        create_project(user=make_user(), slug=slug, name="A study")


def test_a_short_name_is_used_once() -> None:
    project = make_project()
    with pytest.raises(Conflict, match="already"):
        create_project(user=make_user(), slug=project.slug, name="Another")


@pytest.mark.parametrize("password", ["", "short", "password123456", "1234567890123"])
def test_a_weak_password_is_refused(password: str) -> None:
    with pytest.raises(InvalidInput):
        create_user(username="ann", password=password)


@pytest.mark.parametrize("username", ["", "with space", "x" * 200, "a\x00b"])
def test_a_user_name_that_cannot_be_is_refused(username: str) -> None:
    with pytest.raises(InvalidInput):
        create_user(username=username, password="a long enough phrase 9")


def test_an_account_that_exists_keeps_its_password() -> None:
    user, password = ensure_user(username="ann")
    assert password and user.check_password(password)
    assert ensure_user(username="ann") == (user, None)
    set_password(username="ann", password="another long phrase 7")
    with pytest.raises(InvalidInput):
        set_password(username="ann", password="")
    user.refresh_from_db()
    assert user.check_password("another long phrase 7")


def test_what_happens_to_an_account_is_in_the_audit_trail() -> None:
    create_user(username="ann", password="a long enough phrase 9")
    set_password(username="ann", password="another long phrase 7")
    told = AuditEntry.objects.order_by("sequence").values_list("actor", "verb", "record_kind", "record_label")
    assert list(told) == [
        ("command line", "made", "account", "ann"),
        ("command line", "changed password", "account", "ann"),
    ]
    call_command("createsuperuser", "--noinput", "--username", "eve", "--email", "eve@example.org")
    assert AuditEntry.objects.filter(verb="made", record_label="eve").count() == 1
    assert chain_breaks() == []


@pytest.mark.parametrize("thresholds", [{"p": 0.1}, {"nrmse": 0.0}, {"nrmse": float("nan")}, {"pull": "3"}])
def test_thresholds_that_cannot_be_are_refused(thresholds: dict[str, float]) -> None:
    project = make_project()
    with pytest.raises(InvalidInput):
        set_verdict_thresholds(user=project.created_by, project=project, thresholds=thresholds)


def test_only_an_owner_sets_thresholds() -> None:
    project = make_project()
    with pytest.raises(NotPermitted):
        set_verdict_thresholds(
            user=make_member(project, "contributor"), project=project, thresholds={"pull": 4}
        )


def test_a_user_name_is_kept_as_the_login_form_reads_it() -> None:
    assert create_user(username="\ufb01ona", password="a long enough phrase 9").username == "fiona"


def test_a_bad_user_name_is_told_of_the_user_name() -> None:
    with pytest.raises(InvalidInput) as refused:
        create_user(username="with space", password="a long enough phrase 9")
    assert refused.value.problems[0].field == "username"
