"""Reading the record: stored bytes, lineage up and down, the audit chain."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from django.conf import settings
from django.db import connection

from kinetics_db.engine.canonical import sha256_hex
from kinetics_db.errors import NotFound, Unavailable
from kinetics_db.provenance.models import AuditEntry, AuditHead, Derivation, StoredBytes
from kinetics_db.provenance.writing import FIRST_PREVIOUS, entry_digest


def head_of_record() -> str:
    """The digest of the newest audit entry, the same until something is written; empty before the first one."""
    return next(iter(AuditHead.objects.values_list("digest", flat=True)), "")


def path_of(sha256: str) -> Path:
    """Where bytes of that hash are kept."""
    return Path(settings.BYTE_STORE_DIR) / sha256[:2] / sha256


def read_bytes(stored: StoredBytes) -> bytes:
    """The bytes, checked against their hash; NotFound when missing, Unavailable when they were changed."""
    try:
        data = path_of(stored.sha256).read_bytes()
    except OSError as error:
        raise NotFound(f"the stored file {stored.sha256} cannot be read: {error}") from error
    if sha256_hex(data) != stored.sha256:
        raise Unavailable(f"the stored file {stored.sha256} has been changed; restore it from a backup")
    return data


@dataclass(frozen=True)
class Link:
    """One arrow of the lineage with its distance from where the walk began."""

    child: tuple[str, int]
    parent: tuple[str, int]
    distance: int


def lineage(*, kind: str, record_id: int, upward: bool) -> list[Link]:
    """Everything that a record was made from (upward) or that was made from it, in one recursive query."""
    near, far = ("child", "parent") if upward else ("parent", "child")
    table = connection.ops.quote_name(Derivation._meta.db_table)
    # Names are ours, values go as parameters. UNION removes repeats, so shared ancestors are walked once.
    query = f"""
        WITH RECURSIVE walk(child_kind, child_id, parent_kind, parent_id, distance) AS (
            SELECT child_kind, child_id, parent_kind, parent_id, 1 FROM {table}
            WHERE {near}_kind = %s AND {near}_id = %s
            UNION
            SELECT d.child_kind, d.child_id, d.parent_kind, d.parent_id, w.distance + 1
            FROM {table} d JOIN walk w ON d.{near}_kind = w.{far}_kind AND d.{near}_id = w.{far}_id
        )
        SELECT child_kind, child_id, parent_kind, parent_id, MIN(distance) FROM walk
        GROUP BY child_kind, child_id, parent_kind, parent_id
        ORDER BY 5, 1, 2, 3, 4
    """  # noqa: S608
    with connection.cursor() as cursor:
        cursor.execute(query, [kind, record_id])
        return [Link((ck, ci), (pk, pi), distance) for ck, ci, pk, pi, distance in cursor.fetchall()]


def chain_breaks(*, limit: int = 100) -> list[str]:
    """What does not match in the audit chain, in words; empty when it is whole."""
    wrong: list[str] = []
    previous, sequence = FIRST_PREVIOUS, 0
    for entry in AuditEntry.objects.order_by("sequence").iterator(chunk_size=2000):
        sequence += 1
        if entry.sequence != sequence:
            wrong.append(f"audit entry {sequence} is missing before {entry.sequence}")
            sequence = entry.sequence
        if entry.previous != previous:
            wrong.append(f"audit entry {entry.sequence} does not follow the one before it")
        if entry_digest(content_of(entry)) != entry.digest:
            wrong.append(f"audit entry {entry.sequence} has been changed")
        previous = entry.digest
        if len(wrong) >= limit:
            return wrong
    head = AuditHead.objects.first()
    if head is None and sequence:
        wrong.append(f"the chain's head is missing, the last entry is {sequence}")
    elif head is not None and (head.sequence, head.digest) != (sequence, previous):
        wrong.append(f"the chain's head says entry {head.sequence}, the last entry is {sequence}")
    return wrong


def content_of(entry: AuditEntry) -> dict[str, object]:
    """An entry's content as it was hashed."""
    names = "verb record_kind record_id project_id record_label reason digest_before digest_after actor user_id".split()
    return {
        **{name: getattr(entry, name) for name in names},
        "sequence": entry.sequence,
        "at": entry.at.isoformat(timespec="microseconds"),
        "previous": entry.previous,
    }
