"""Requests that may be sent twice and are done once: a key, the request's digest and the answer it got."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import timedelta

from django.core.cache import cache
from django.db import IntegrityError, connection, transaction
from django.utils import timezone

from kinetics_db.accounts.models import IdempotencyKey, User
from kinetics_db.errors import Conflict, InvalidInput

KEPT = timedelta(days=7)
SWEPT_EVERY_SECONDS = 3600


@dataclass(frozen=True)
class Answer:
    """What a request was answered."""

    status: int
    headers: dict[str, str] = field(default_factory=dict)
    body: bytes = b""


def claim_key(*, user: User, key: str, request: str, request_digest: str) -> Answer | None:
    """Take a key for the running transaction; the earlier answer when the same request had it before.

    A request that comes while the first one is being worked on waits here for the end of that one's transaction.
    InvalidInput when the key belongs to another request.
    """
    if not connection.in_atomic_block:
        raise RuntimeError("an idempotency key is taken in the transaction of its write")
    now = timezone.now()
    IdempotencyKey.objects.filter(user=user, key=key, created__lt=now - KEPT).delete()
    try:
        with transaction.atomic():
            IdempotencyKey.objects.create(
                user=user, key=key, request=request[:300], request_digest=request_digest, created=now
            )
    except IntegrityError:
        return _earlier(user=user, key=key, request_digest=request_digest)
    return None


def _earlier(*, user: User, key: str, request_digest: str) -> Answer:
    found = IdempotencyKey.objects.filter(user=user, key=key).first()
    if found is None or not found.status:
        raise Conflict("a request with this Idempotency-Key is being worked on; send it again in a moment")
    if found.request_digest != request_digest:
        raise InvalidInput(
            f"this key was used for another request on {found.created:%Y-%m-%d} ({found.request})",
            field="Idempotency-Key",
            cure="a new key for a new request",
        )
    return Answer(found.status, dict(found.headers), bytes(found.body))


def keep_answer(*, user: User, key: str, answer: Answer) -> None:
    """Keep the answer with the key that this transaction has taken."""
    IdempotencyKey.objects.filter(user=user, key=key).update(
        status=answer.status, headers=answer.headers, body=answer.body
    )


def forget_old_keys() -> int:
    """Remove keys that are kept long enough; looks at most once an hour. Gives how many went."""
    if not cache.add("idempotency-keys-swept", 1, timeout=SWEPT_EVERY_SECONDS):
        return 0
    return IdempotencyKey.objects.filter(created__lt=timezone.now() - KEPT).delete()[0]
