"""Keys of requests: taken in the write's transaction, answered again, forgotten after a week."""

from __future__ import annotations

from datetime import timedelta

import pytest
from django.core.cache import cache
from django.db import transaction
from django.utils import timezone

from kinetics_db.accounts.idempotency import KEPT, Answer, claim_key, forget_old_keys, keep_answer
from kinetics_db.accounts.models import IdempotencyKey, User
from kinetics_db.errors import Conflict, InvalidInput
from tests.factories.people import make_user

pytestmark = pytest.mark.django_db


def claim(user: User, digest: str = "d" * 64) -> Answer | None:
    return claim_key(user=user, key="k-1", request="POST /runs/", request_digest=digest)


def test_a_key_gives_its_answer_to_the_same_request() -> None:
    user, answer = make_user(), Answer(201, {"Location": "/runs/1/"}, b'{"id":1}')
    assert claim(user) is None
    keep_answer(user=user, key="k-1", answer=answer)
    assert claim(user) == answer


def test_a_key_is_refused_to_another_request() -> None:
    user = make_user()
    claim(user)
    keep_answer(user=user, key="k-1", answer=Answer(201))
    with pytest.raises(InvalidInput, match="another request"):
        claim(user, "e" * 64)


def test_a_key_belongs_to_its_person() -> None:
    claim(make_user())
    assert claim(make_user()) is None


def test_a_request_that_has_no_answer_yet_is_a_conflict() -> None:
    user = make_user()
    claim(user)
    with pytest.raises(Conflict, match="in a moment"):
        claim(user)


def test_a_key_goes_when_its_transaction_does() -> None:
    user = make_user()
    with pytest.raises(RuntimeError, match="crash"), transaction.atomic():
        claim(user)
        raise RuntimeError("crash")
    assert not IdempotencyKey.objects.exists()


@pytest.mark.django_db(transaction=True)
def test_a_key_is_not_taken_outside_a_transaction() -> None:
    with pytest.raises(RuntimeError, match="transaction"):
        claim(make_user())


def test_a_key_is_free_again_after_a_week() -> None:
    user = make_user()
    claim(user)
    IdempotencyKey.objects.update(created=timezone.now() - KEPT - timedelta(minutes=1))
    assert claim(user, "e" * 64) is None


def test_old_keys_are_forgotten_at_most_once_an_hour() -> None:
    cache.clear()
    old, new = make_user(), make_user()
    claim(old)
    IdempotencyKey.objects.update(created=timezone.now() - KEPT - timedelta(minutes=1))
    claim(new)
    assert forget_old_keys() == 1
    assert list(IdempotencyKey.objects.values_list("user_id", flat=True)) == [new.pk]
    IdempotencyKey.objects.update(created=timezone.now() - KEPT - timedelta(minutes=1))
    assert forget_old_keys() == 0
