"""The frame in which every write to the record happens: one transaction, one audit entry for each write.

Entries are collected while the work runs and appended to the chain as the last statements of the outermost
transaction, so that the lock on the chain's head is held only for moments.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from django.db import transaction
from django.utils import timezone

from kinetics_db.engine.canonical import digest

FIRST_PREVIOUS = "0" * 64


@dataclass
class _Pending:
    """Entries of the running outermost frame."""

    user: Any
    actor: str
    entries: list[dict[str, Any]] = field(default_factory=list)


_state = threading.local()


def require_recording(kind: str) -> None:
    """Refuse a write that no audit entry would tell of."""
    if getattr(_state, "pending", None) is None:
        raise RuntimeError(f"a {kind} must be written inside provenance.services.recording()")


@contextmanager
def recording(*, user: Any) -> Iterator[None]:
    """Transaction in which records are written and audited; may be nested, the outermost one appends."""
    if getattr(_state, "pending", None) is not None:
        with transaction.atomic():
            yield
        return
    _state.pending = _Pending(user=user, actor=user.get_username())
    try:
        with transaction.atomic():
            yield
            _append(_state.pending)
    finally:
        _state.pending = None


def note_write(
    *,
    verb: str,
    record_kind: str,
    record_id: int | None,
    project_id: int | None,
    label: str = "",
    reason: str = "",
    digest_before: str = "",
    digest_after: str = "",
) -> None:
    """Collect the audit entry of one write for the running frame."""
    require_recording(record_kind)
    _state.pending.entries.append(
        {
            "verb": verb,
            "record_kind": record_kind,
            "record_id": record_id,
            "project_id": project_id,
            "record_label": label[:200],
            "reason": reason[:1000],
            "digest_before": digest_before,
            "digest_after": digest_after,
        }
    )


def audit_account(
    sender: Any, *, instance: Any, created: bool, update_fields: frozenset[str] | None, raw: bool, **_: Any
) -> None:
    """Audit every save of an account, also by Django's own commands.

    Accounts stand below the trail and so cannot write to it themselves. The date of the last login is no
    change of the account.
    """
    if raw or update_fields == {"last_login"}:
        return
    changed = " ".join(["changed", *sorted(update_fields or ())])
    with recording(user=instance):
        note_write(
            verb="made" if created else changed[:40],
            record_kind="account",
            record_id=instance.pk,
            project_id=None,
            label=instance.get_username(),
        )


def entry_digest(values: dict[str, Any]) -> str:
    """SHA-256 over the canonical JSON of an audit entry's content, the previous digest included."""
    return digest(values)


def _append(pending: _Pending) -> None:
    from kinetics_db.provenance.models import AuditEntry, AuditHead

    if not pending.entries:
        return
    AuditHead.objects.get_or_create(singleton=True)
    head = AuditHead.objects.select_for_update().get(singleton=True)
    rows = []
    now = timezone.now()
    for entry in pending.entries:
        head.sequence += 1
        content = {
            **entry,
            "sequence": head.sequence,
            "at": now.isoformat(timespec="microseconds"),
            "actor": pending.actor,
            "previous": head.digest,
        }
        head.digest = entry_digest(content)
        rows.append(AuditEntry(**{**content, "at": now}, user=pending.user, digest=head.digest))
    AuditEntry.objects.bulk_create(rows)
    head.save(update_fields=["sequence", "digest"])
