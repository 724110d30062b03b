"""Uploaded bytes between 'what was understood' and 'store': held for their person, recorded nowhere.

A file of the folder ``incoming`` in the byte store is named after person, run and a random token, so a token
opens nothing for anybody else or for another run. What nobody stores is removed after a day.
"""

from __future__ import annotations

import re
import secrets
import time
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from django.conf import settings

from kinetics_db.accounts.models import User
from kinetics_db.errors import InvalidInput, NotFound, Unavailable
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.runs.models import Run

SECONDS_HELD = 24 * 3600
MOST_HELD = 10
"""Files that one person may have waiting; the oldest makes room for a new one."""

_TOKEN = re.compile(r"[A-Za-z0-9_-]{32}", re.ASCII)
GONE = "the file is not held any longer; it is kept for a day, or until it is stored"


@dataclass(frozen=True)
class Held:
    """Bytes that wait; ``token`` brings them back to the same person for the same run."""

    token: str
    path: Path

    def read(self) -> bytes:
        """The bytes as they came."""
        try:
            return self.path.read_bytes()
        except OSError as error:
            raise NotFound(GONE) from error


def hold_bytes(*, user: User, run: Run, chunks: Iterable[bytes], size: int | None = None) -> Held:
    """Hold bytes until they are stored; InvalidInput when there are too many, by their announced ``size`` or
    while they come."""
    require_contributor(user=user, project_id=run.project_id)
    _require_size(size or 0)
    folder = _folder()
    token = secrets.token_urlsafe(24)
    held = Held(token, folder / f"{user.pk}.{run.pk}.{token}")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _make_room(folder, user)
        _write(held.path, chunks)
    except OSError as error:
        raise Unavailable(f"the file store {settings.BYTE_STORE_DIR} cannot be written: {error}") from error
    return held


def held_bytes(*, user: User, run: Run, token: str) -> Held:
    """What was held under the token for this person and run; NotFound when it is gone or was somebody else's."""
    require_contributor(user=user, project_id=run.project_id)
    path = _folder() / f"{user.pk}.{run.pk}.{token}"
    if not _TOKEN.fullmatch(token) or not path.is_file() or _is_old(path):
        raise NotFound(GONE)
    return Held(token, path)


def let_go(held: Held) -> None:
    """Remove what was held; it is stored, or not wanted."""
    held.path.unlink(missing_ok=True)


def _folder() -> Path:
    return Path(settings.BYTE_STORE_DIR) / "incoming"


def _write(path: Path, chunks: Iterable[bytes]) -> None:
    size = 0
    try:
        with path.open("xb") as file:
            for chunk in chunks:
                size += len(chunk)
                _require_size(size)
                file.write(chunk)
    except BaseException:
        path.unlink(missing_ok=True)
        raise


def _require_size(size: int) -> None:
    if size > settings.MAX_FILE_BYTES:
        raise InvalidInput(
            f"the file has {size:,} bytes or more",
            field="file",
            cure=f"at most {settings.MAX_FILE_BYTES:,} bytes (RATEWRIGHT_MAX_FILE_BYTES)",
        )


def _make_room(folder: Path, user: User) -> None:
    """Remove what is old, whoever's it is, and this person's oldest beyond the most that may wait."""
    own: list[tuple[float, Path]] = []
    for path in folder.iterdir():
        if _is_old(path):
            path.unlink(missing_ok=True)
        elif path.name.startswith(f"{user.pk}."):
            own.append((_written(path), path))
    for _, path in sorted(own)[: max(0, len(own) - MOST_HELD + 1)]:
        path.unlink(missing_ok=True)


def _is_old(path: Path) -> bool:
    return time.time() - _written(path) > SECONDS_HELD


def _written(path: Path) -> float:
    """When the file was written; long ago when another request has removed it meanwhile."""
    try:
        return path.stat().st_mtime
    except OSError:
        return 0.0
