"""Writing the record: immutable rows with their hash, lineage and audit entry; bytes under their SHA-256."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

from django.conf import settings
from django.db import models

from kinetics_db.accounts.models import User
from kinetics_db.engine.canonical import canonical_json, sha256_hex
from kinetics_db.errors import InvalidInput, Unavailable
from kinetics_db.provenance.models import Derivation, ImmutableRecord, StoredBytes
from kinetics_db.provenance.selectors import path_of
from kinetics_db.provenance.writing import note_write, recording

__all__ = ["Prepared", "keep_bytes", "note_write", "prepared", "recording", "require_size", "save_record"]

Record = TypeVar("Record", bound=ImmutableRecord)


@dataclass(frozen=True)
class Prepared:
    """Content brought to canonical bytes beforehand, so that large content costs no time inside a transaction."""

    canonical: bytes
    digest: str


def prepared(content: Mapping[str, Any]) -> Prepared:
    """Canonical bytes and hash of plain values."""
    data = canonical_json(content)
    return Prepared(data, sha256_hex(data))


def save_record(
    record: Record,
    *,
    user: User,
    content: Mapping[str, Any] | Prepared,
    parents: Iterable[models.Model] = (),
    project_id: int | None,
    label: str = "",
    verb: str = "made",
    reason: str = "",
    digest_before: str = "",
) -> Record:
    """Store an immutable record: canonical bytes and hash of `content`, the row, its lineage, its audit entry.

    `content` is a mapping of plain values, hashed as RFC 8785 JSON, or prepared already. Parents are the
    records that it was made from. Must run inside `recording()`.
    """
    ready = content if isinstance(content, Prepared) else prepared(content)
    record.canonical, record.digest = ready.canonical, ready.digest
    record.created_by = user
    record.save()
    Derivation.objects.bulk_create(
        [
            Derivation(
                child_kind=record.kind(),
                child_id=record.pk,
                parent_kind=str(parent._meta.verbose_name),
                parent_id=parent.pk,
            )
            for parent in dict.fromkeys(parents)
        ]
    )
    note_write(
        verb=verb,
        record_kind=record.kind(),
        record_id=record.pk,
        project_id=project_id,
        label=label,
        reason=reason,
        digest_before=digest_before,
        digest_after=record.digest,
    )
    return record


def keep_bytes(data: bytes) -> StoredBytes:
    """Keep bytes under their SHA-256: temporary file, fsync, rename, then the row.

    Bytes already kept are not written again. InvalidInput when there are too many; Unavailable when the
    folder cannot be written.
    """
    require_size(data)
    sha256 = sha256_hex(data)
    path = path_of(sha256)
    if not (path.exists() and path.stat().st_size == len(data)):
        try:
            _write_durably(path, data)
        except OSError as error:
            raise Unavailable(
                f"the file store {settings.BYTE_STORE_DIR} cannot be written: {error}"
            ) from error
    return StoredBytes.objects.get_or_create(sha256=sha256, defaults={"size": len(data)})[0]


def require_size(data: bytes) -> None:
    """InvalidInput when a file is larger than the installation takes."""
    if len(data) > settings.MAX_FILE_BYTES:
        raise InvalidInput(
            f"the file has {len(data):,} bytes",
            field="file",
            cure=f"at most {settings.MAX_FILE_BYTES:,} bytes (RATEWRIGHT_MAX_FILE_BYTES)",
        )


def _write_durably(path: Path, data: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    descriptor, temporary = tempfile.mkstemp(dir=path.parent, prefix=".incoming-")
    try:
        with os.fdopen(descriptor, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        Path(temporary).chmod(0o444)
        Path(temporary).replace(path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)
