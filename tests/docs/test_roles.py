"""The page about roles says what the tests of access show, and what tokens take away."""

from __future__ import annotations

import re
from collections.abc import Callable
from datetime import timedelta
from typing import Any

import pytest
from django.utils import timezone

from kinetics_db.accounts.limits import SCOPES
from kinetics_db.accounts.models import User
from kinetics_db.accounts.selectors import access_tokens_of
from kinetics_db.accounts.services import LONGEST_LIFE
from kinetics_db.errors import InvalidInput, NotFound, NotPermitted
from kinetics_db.projects.access import issue_access_token, withdraw_access_token
from kinetics_db.projects.models import Membership
from kinetics_db.projects.own_account import change_password, change_time_zone
from kinetics_db.projects.selectors import project_named, role_in
from kinetics_db.projects.services import create_project
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.web.account_forms import DAYS_PROPOSED
from tests.access.test_pages import PAGES
from tests.docs.fences import DOCS
from tests.factories.people import make_project, make_user
from tests.factories.tokens import make_token, through

PAGE = (DOCS / "reference" / "roles.md").read_text(encoding="utf-8")
BY_WORDS = {"everybody": "nobody", "who is logged in": "stranger"}
"""Words of the page -> roles of the tests; other roles are called the same."""


def rows_of(heading: str) -> list[list[str]]:
    lines = [line for line in heading.splitlines() if line.startswith("|")][2:]
    return [[cell.strip() for cell in line[1:-1].split("|")] for line in lines]


def section(heading: str) -> str:
    return PAGE.split(f"\n## {heading}\n", 1)[1].split("\n## ", 1)[0]


def pages_in(cell: str) -> set[str]:
    return {name.strip().replace(" ", "-") for name in cell.split(",") if name.strip()}


def test_every_page_stands_beside_the_role_that_it_asks_for() -> None:
    seen: dict[str, str] = {}
    sent: dict[str, str] = {"withdraw-token": "owner of the token"}
    for who, to_see, to_send in rows_of(section("Pages")):
        role = BY_WORDS.get(who.strip("*"), who.strip("*"))
        looked_at = pages_in(to_see)
        also = to_send.startswith("the same, and ")
        seen |= dict.fromkeys(looked_at, role)
        sent |= dict.fromkeys(pages_in(to_send.removeprefix("the same, and ")), role)
        if also:
            sent |= dict.fromkeys(looked_at, role)
    assert seen == {name: see for name, (see, _) in PAGES.items() if see}
    assert sent == {name: send for name, (_, send) in PAGES.items() if send}


def test_roles_and_limits_of_tokens_are_those_of_the_code() -> None:
    assert [row[0] for row in rows_of(PAGE.split("\n## ")[0])] == ["none", *Membership.Role.values]
    limits = [row[0].strip("`") for row in rows_of(section("Access tokens"))]
    assert [limit for limit in limits if limit in SCOPES] == list(SCOPES)
    assert f"at most {LONGEST_LIFE.days} days" in section("Access tokens")


@pytest.fixture
def owner(db: None) -> User:
    return make_user("mira")


def test_a_reading_token_makes_a_reader_of_an_owner_and_begins_no_project(owner: User) -> None:
    project = make_project(owner)
    script = through(make_token(owner, scope="read")[0])
    assert role_in(user=script, project_id=project.pk) == "reader"
    with pytest.raises(NotPermitted):
        create_project(user=script, slug="another", name="Another")


def test_a_token_of_one_project_does_not_know_the_others(owner: User) -> None:
    project, other = make_project(owner), make_project(owner)
    script = through(make_token(owner, scope="write", project=project.slug)[0])
    assert role_in(user=script, project_id=project.pk) == "owner"
    with pytest.raises(NotFound):
        project_named(user=script, slug=other.slug)
    with pytest.raises(NotPermitted):
        create_project(user=script, slug="another", name="Another")


FORBIDDEN: dict[str, Callable[[User, int], Any]] = {
    "make a token": lambda user, _: make_token(user, "second", scope="read"),
    "withdraw a token": lambda user, number: withdraw_access_token(user=user, token_id=number),
    "change the account": lambda user, _: change_time_zone(user=user, time_zone="UTC"),
    "change the password": lambda user, _: change_password(
        user=user, current="a long password 1", password="a long password 2"
    ),
}


@pytest.mark.parametrize("what", FORBIDDEN)
def test_no_token_may(what: str, owner: User) -> None:
    token, _ = make_token(owner, scope="write")
    with pytest.raises(NotPermitted):
        FORBIDDEN[what](through(token), token.pk)


def test_a_token_sees_itself_only_and_is_named_beside_the_person_in_the_audit_chain(owner: User) -> None:
    token, secret = make_token(owner, "notebook", scope="write")
    make_token(owner, "another")
    script = through(token)
    assert list(access_tokens_of(user=script)) == [token]
    assert secret.startswith(token.start) and len(token.start) == 9 and secret not in str(vars(token))
    assert len(re.findall(r"first\s+nine\s+characters|its\s+SHA-256", section("Access tokens"))) == 2
    create_project(user=script, slug="by-a-script", name="By a script")
    entry = AuditEntry.objects.order_by("-sequence").first()
    assert entry is not None and entry.actor == "mira (token notebook)"


def test_the_page_on_making_a_token_says_how_long_it_lives_and_how_its_secret_looks(owner: User) -> None:
    page = " ".join((DOCS / "how-to" / "pull-a-data-set.md").read_text(encoding="utf-8").split())
    assert f"at most {LONGEST_LIFE.days} days from now, {DAYS_PROPOSED} proposed" in page
    beginning, length = re.findall(r"`(rw_)` and (\d+) characters", page)[0]
    _, secret = make_token(owner)
    assert secret.startswith(beginning) and len(secret) == len(beginning) + int(length)


def test_a_token_for_longer_than_the_page_says_is_refused(owner: User) -> None:
    with pytest.raises(InvalidInput):
        issue_access_token(
            user=owner, name="x", scope="read", expires=timezone.now() + LONGEST_LIFE + timedelta(hours=1)
        )
