"""Strong ETags, and what If-None-Match and If-Match mean for them (RFC 9110, 13.1)."""

from __future__ import annotations

import hashlib
import json

from django.utils.http import parse_etags
from rest_framework.request import Request

from api.exceptions import PreconditionFailed, PreconditionRequired

IMMUTABLE = "private, max-age=31536000, immutable"
CHECKED = "private, no-cache"


def etag_of(*parts: object) -> str:
    """The tag over a record's hash and whatever else of its state is shown."""
    return f'"{hashlib.sha256(json.dumps(parts, default=str).encode()).hexdigest()[:40]}"'


def etag_of_bytes(data: bytes) -> str:
    """The tag over the bytes of an answer."""
    return f'"{hashlib.sha256(data).hexdigest()[:40]}"'


def is_known(request: Request, etag: str) -> bool:
    """Whether the reader has this already (If-None-Match, weak comparison)."""
    known = parse_etags(request.headers.get("If-None-Match", ""))
    return "*" in known or etag in {tag.removeprefix("W/") for tag in known}


def require_match(request: Request, etag: str) -> None:
    """412 unless the change is of this state (If-Match, strong comparison); 428 when it does not say."""
    given = request.headers.get("If-Match", "")
    if not given:
        raise PreconditionRequired
    tags = parse_etags(given)
    if "*" not in tags and etag not in tags:
        raise PreconditionFailed
