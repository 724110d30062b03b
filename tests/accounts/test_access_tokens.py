"""Access tokens: made once, kept as digests, limited, withdrawn; every step audited."""

from __future__ import annotations

from datetime import timedelta

import pytest
from django.db import IntegrityError, transaction
from django.utils import timezone

from kinetics_db.accounts.limits import Limits
from kinetics_db.accounts.models import AccessToken
from kinetics_db.accounts.selectors import access_tokens_of, digest_of_secret, token_of_secret
from kinetics_db.accounts.services import note_use
from kinetics_db.errors import Conflict, InvalidInput, NotFound, NotPermitted
from kinetics_db.materials.services import enter_compound
from kinetics_db.projects.access import issue_access_token, withdraw_access_token
from kinetics_db.projects.selectors import (
    projects_visible_to,
    require_contributor,
    require_reader,
    role_in,
    roles_remembered,
)
from kinetics_db.projects.services import create_project
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.people import make_project, make_user
from tests.factories.tokens import in_days, make_token, through

pytestmark = pytest.mark.django_db


def test_a_token_is_found_by_its_secret_and_only_its_digest_is_kept() -> None:
    user = make_user()
    token, secret = make_token(user)
    assert secret.startswith("rw_") and len(secret) > 40
    assert token_of_secret(secret) == token
    stored = AccessToken.objects.values().get()
    assert secret not in str(stored) and stored["digest"] == digest_of_secret(secret)
    assert secret.startswith(stored["start"]) and len(stored["start"]) == 9


def test_no_token_is_found_by_another_secret() -> None:
    make_token(make_user())
    assert token_of_secret("rw_" + "x" * 43) is None
    assert token_of_secret("rw_\ud800") is None


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"name": "  "}, "name"),
        ({"name": "x" * 61}, "name"),
        ({"scope": "everything"}, "scope"),
        ({"project": "nowhere"}, "project"),
        ({"expires": timezone.now() - timedelta(seconds=1)}, "expires"),
        ({"expires": timezone.now() + timedelta(days=367)}, "expires"),
    ],
)
def test_a_token_that_cannot_be_is_refused_with_the_field(change: dict[str, object], field: str) -> None:
    wanted = {"name": "notebook", "scope": "read", "expires": in_days(30), **change}
    with pytest.raises(InvalidInput) as caught:
        issue_access_token(user=make_user(), **wanted)  # type: ignore[arg-type]
    assert caught.value.problems[0].field == field
    assert not AccessToken.objects.exists()


def test_a_project_of_others_cannot_be_named_in_a_token() -> None:
    project = make_project()
    with pytest.raises(InvalidInput, match="no project"):
        make_token(make_user(), project=project.slug)


def test_a_name_is_free_again_once_its_token_is_withdrawn() -> None:
    user = make_user()
    token, _ = make_token(user, name="notebook")
    with pytest.raises(InvalidInput, match="already"):
        make_token(user, name="notebook")
    make_token(make_user(), name="notebook")
    withdraw_access_token(user=user, token_id=token.pk)
    make_token(user, name="notebook")


def test_withdrawing_counts_once_and_only_for_ones_own_tokens() -> None:
    user = make_user()
    token, _ = make_token(user)
    with pytest.raises(NotFound):
        withdraw_access_token(user=make_user(), token_id=token.pk)
    assert withdraw_access_token(user=user, token_id=token.pk).withdrawn is not None
    with pytest.raises(Conflict):
        withdraw_access_token(user=user, token_id=token.pk)


def test_issuing_and_withdrawing_are_audited() -> None:
    user = make_user()
    token, secret = make_token(user, name="notebook")
    withdraw_access_token(user=user, token_id=token.pk)
    entries = AuditEntry.objects.filter(record_kind="access token").order_by("sequence")
    assert [(e.verb, e.record_label, e.actor) for e in entries] == [
        ("issued", "notebook", user.username),
        ("withdrew", "notebook", user.username),
    ]
    assert not any(secret in f"{e.record_label}{e.reason}" for e in entries)
    assert chain_breaks() == []


def test_whoever_acts_through_a_token_stands_in_the_audit_with_it() -> None:
    project = make_project()
    user = through(make_token(project.created_by, name="robot", scope="write")[0])
    enter_compound(user=user, project_id=project.pk, name="ester")
    entry = AuditEntry.objects.order_by("-sequence")[0]
    assert entry.actor == f"{user.username} (token robot)" and entry.user_id == user.pk
    assert chain_breaks() == []


def test_the_longest_names_fit_into_the_audit() -> None:
    project = make_project(make_user("u" * 150))
    user = through(make_token(project.created_by, name="t" * 60, scope="write")[0])
    enter_compound(user=user, project_id=project.pk, name="ester")
    assert AuditEntry.objects.order_by("-sequence")[0].actor == f"{'u' * 150} (token {'t' * 60})"


def test_a_reading_token_makes_a_reader_of_an_owner() -> None:
    project = make_project()
    user = through(make_token(project.created_by)[0])
    assert role_in(user=user, project_id=project.pk) == "reader"
    require_reader(user=user, project_id=project.pk)
    with pytest.raises(NotPermitted, match="may only read"):
        require_contributor(user=user, project_id=project.pk)


def test_a_writing_token_gives_no_more_than_its_person_has() -> None:
    project = make_project()
    stranger = through(make_token(make_user(), scope="write")[0])
    assert role_in(user=stranger, project_id=project.pk) is None
    owner = through(make_token(project.created_by, scope="write")[0])
    assert role_in(user=owner, project_id=project.pk) == "owner"


def test_a_token_for_one_project_sees_no_other() -> None:
    project = make_project()
    other = make_project(project.created_by)
    user = through(make_token(project.created_by, scope="write", project=project.slug)[0])
    assert list(projects_visible_to(user)) == [project]
    assert role_in(user=user, project_id=project.pk) == "owner"
    with pytest.raises(NotFound):
        require_reader(user=user, project_id=other.pk)


def test_remembered_roles_are_those_of_the_same_token() -> None:
    project = make_project()
    reading = through(make_token(project.created_by)[0])
    with roles_remembered():
        assert role_in(user=project.created_by, project_id=project.pk) == "owner"
        assert role_in(user=reading, project_id=project.pk) == "reader"
        assert role_in(user=project.created_by, project_id=project.pk) == "owner"


@pytest.mark.parametrize("scope", ["read", "write"])
def test_a_token_makes_and_withdraws_no_tokens(scope: str) -> None:
    token, _ = make_token(make_user(), scope=scope)
    with pytest.raises(NotPermitted):
        make_token(through(token), name="another")
    with pytest.raises(NotPermitted):
        withdraw_access_token(user=through(token), token_id=token.pk)


def test_projects_are_made_through_writing_tokens_for_all_projects_only() -> None:
    project = make_project()
    user = project.created_by
    create_project(user=through(make_token(user, "all", scope="write")[0]), slug="new-one", name="New")
    for token, _ in (make_token(user, "r"), make_token(user, "p", scope="write", project=project.slug)):
        with pytest.raises(NotPermitted):
            create_project(user=through(token), slug="another", name="Another")


def test_a_token_sees_itself_and_a_person_all_their_tokens() -> None:
    user = make_user()
    first, _ = make_token(user, "first")
    second, _ = make_token(user, "second")
    make_token(make_user(), "first")
    assert list(access_tokens_of(user=user)) == [second, first]
    assert list(access_tokens_of(user=through(first))) == [first]


def test_use_is_noted_at_most_once_a_minute() -> None:
    token, _ = make_token(make_user())
    note_use(token)
    first = AccessToken.objects.get().last_used
    note_use(AccessToken.objects.get())
    note_use(token)  # as another process saw it, before
    assert first is not None and AccessToken.objects.get().last_used == first
    AccessToken.objects.update(last_used=first - timedelta(minutes=2))
    note_use(AccessToken.objects.get())
    assert AccessToken.objects.get().last_used >= first  # type: ignore[operator]


def test_limits_say_what_they_cover() -> None:
    assert Limits("read").covers(1) and not Limits("read").may_write
    assert Limits("write", 1).covers(1) and not Limits("write", 1).covers(2)
    assert make_user().limits is None


@pytest.mark.parametrize(
    "change", [{"name": ""}, {"scope": "all"}, {"expires": timezone.now() - timedelta(days=9)}]
)
def test_the_database_refuses_tokens_that_no_service_makes(change: dict[str, object]) -> None:
    token, _ = make_token(make_user())
    with pytest.raises(IntegrityError), transaction.atomic():
        AccessToken.objects.filter(pk=token.pk).update(**change)
