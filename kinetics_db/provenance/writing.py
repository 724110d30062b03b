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
from kinetics_db.errors import Conflict

FIRST_PREVIOUS = "0" * 64


COMMAND_LINE = "command line"
"""Who acts when nobody is signed in: a management command."""


@dataclass
class _Pending:
    """Entries of the running outermost frame, and who acts in the frames that are open."""

    users: list[Any] = field(default_factory=list)
    entries: list[dict[str, Any]] = field(default_factory=list)


_state = threading.local()


def require_recording(kind: str) -> None:
    """Refuse a write that no audit entry would tell of."""
    if getattr(_state, "pending", None) is None:
        raise RuntimeError(f"a {kind} must be written inside provenance.services.recording()")


@contextmanager
def recording(*, user: Any) -> Iterator[None]:
    """Transaction in which records are written and audited; may be nested, the outermost one appends.

    ``user`` is who acts; None is the command line. An inner frame that is rolled back takes its entries with it.
    """
    pending: _Pending | None = getattr(_state, "pending", None)
    if pending is None:
        _state.pending = pending = _Pending(users=[user])
        try:
            with transaction.atomic():
                yield
                _append(pending.entries)
        finally:
            _state.pending = None
        return
    before = len(pending.entries)
    pending.users.append(user)
    try:
        with transaction.atomic():
            yield
    except BaseException:
        del pending.entries[before:]
        raise
    finally:
        pending.users.pop()


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
    user = _state.pending.users[-1]
    _state.pending.entries.append(
        {
            "user_id": user.pk if user is not None else None,
            "actor": _actor(user),
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


def _actor(user: Any) -> str:
    if user is None:
        return COMMAND_LINE
    limits = getattr(user, "limits", None)
    return user.get_username() if limits is None else f"{user.get_username()} (token {limits.token})"


def audit_account(
    sender: Any, *, instance: Any, created: bool, update_fields: frozenset[str] | None, raw: bool, **_: Any
) -> None:
    """Audit every save of an account, also by Django's own commands.

    Accounts stand below the trail and so cannot write to it themselves. Whoever acts for somebody opens the
    frame; without one it is the command line. The date of the last login is no change of the account.
    """
    if raw or update_fields == {"last_login"}:
        return
    changed = " ".join(["changed", *sorted(update_fields or ())])
    pending: _Pending | None = getattr(_state, "pending", None)
    with recording(user=pending.users[-1] if pending is not None else None):
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


def _append(entries: list[dict[str, Any]]) -> None:
    from kinetics_db.provenance.models import AuditEntry, AuditHead

    if not entries:
        return
    _, made = AuditHead.objects.get_or_create(singleton=True)
    if made and AuditEntry.objects.exists():
        raise Conflict(
            "the end of the audit chain is missing; nothing is recorded until the database is restored"
        )
    head = AuditHead.objects.select_for_update().get(singleton=True)
    rows = []
    now = timezone.now()
    for entry in entries:
        head.sequence += 1
        content = {
            **entry,
            "sequence": head.sequence,
            "at": now.isoformat(timespec="microseconds"),
            "previous": head.digest,
        }
        head.digest = entry_digest(content)
        rows.append(AuditEntry(**{**content, "at": now}, digest=head.digest))
    AuditEntry.objects.bulk_create(rows)
    head.save(update_fields=["sequence", "digest"])
