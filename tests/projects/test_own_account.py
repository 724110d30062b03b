"""What people change about their own account."""

from __future__ import annotations

import pytest

from kinetics_db.accounts.limits import Limits
from kinetics_db.accounts.models import User
from kinetics_db.errors import InvalidInput, NotPermitted
from kinetics_db.projects.own_account import change_password, change_time_zone
from kinetics_db.provenance.models import AuditEntry
from tests.factories.people import make_user

pytestmark = pytest.mark.django_db
OLD, NEW = "a long password 1", "quite another phrase 7"


def last_entry() -> tuple[str, str, str]:
    entry = AuditEntry.objects.latest("sequence")
    return entry.actor, entry.verb, entry.record_label


def test_dates_can_be_shown_in_another_zone() -> None:
    user = make_user("mira")
    change_time_zone(user=user, time_zone=" Europe/Helsinki ")
    assert User.objects.get(pk=user.pk).time_zone == "Europe/Helsinki"
    assert last_entry() == ("mira", "changed time_zone", "mira")


@pytest.mark.parametrize(
    "zone", ["", "Nowhere/Else", "../../etc/passwd", "europe/helsinki", "a\x00b", "x" * 10_000]
)
def test_a_zone_that_does_not_exist_is_refused(zone: str) -> None:
    user = make_user()
    with pytest.raises(InvalidInput) as refused:
        change_time_zone(user=user, time_zone=zone)
    assert refused.value.problems[0].field == "time_zone"
    assert user.time_zone == User.objects.get(pk=user.pk).time_zone == "UTC"


def test_a_password_is_changed_by_who_knows_the_current_one() -> None:
    user = make_user("mira")
    change_password(user=user, current=OLD, password=NEW)
    assert User.objects.get(pk=user.pk).check_password(NEW)
    assert last_entry() == ("mira", "changed password", "mira")


@pytest.mark.parametrize(
    ("current", "password", "field"),
    [
        ("wrong", NEW, "current"),
        ("", NEW, "current"),
        (OLD, OLD, "password"),
        (OLD, "short", "password"),
        (OLD, "", "password"),
        (OLD, "x" * 1001, "password"),
        ("x" * 1001, NEW, "current"),
        (OLD, "mira-mira-1", "password"),
    ],
)
def test_a_password_that_cannot_be_is_refused_at_its_field(current: str, password: str, field: str) -> None:
    user = make_user("mira-mira")
    with pytest.raises(InvalidInput) as refused:
        change_password(user=user, current=current, password=password)
    assert refused.value.problems[0].field == field
    assert User.objects.get(pk=user.pk).check_password(OLD)


def test_a_token_changes_nothing_about_an_account() -> None:
    user = make_user()
    user.limits = Limits("write", None, "script")
    with pytest.raises(NotPermitted):
        change_time_zone(user=user, time_zone="Europe/Helsinki")
    with pytest.raises(NotPermitted):
        change_password(user=user, current=OLD, password=NEW)
