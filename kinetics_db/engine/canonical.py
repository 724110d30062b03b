"""Canonical JSON (RFC 8785) of plain values, and SHA-256 over it.

Text is brought to Unicode NFC; -0.0 becomes 0; NaN and infinities are refused, so whoever stores 'no value'
writes null and says why beside it. Integers beyond 2^53 are refused, as RFC
8785 asks, unless they are how it writes a float.
"""

from __future__ import annotations

import hashlib
import math
import unicodedata
from collections.abc import Mapping, Sequence
from typing import Any

import rfc8785

from kinetics_db.errors import InvalidInput

MAX_INTEGER = 2**53 - 1


def plain(value: Any, path: str = "$") -> Any:
    """Value with NFC text, lists for sequences and -0.0 as 0; InvalidInput names the path of what cannot be."""
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, str):
        return _text(value, path)
    if isinstance(value, int):
        if abs(value) <= MAX_INTEGER:
            return int(value)
        # RFC 8785 writes large floats without exponent, so they read back as integers.
        if abs(value) < 10**21 and rfc8785.dumps(float(value)) == str(value).encode():
            return float(value)
        raise InvalidInput(f"integer {value} at {path} is beyond 2^53", cure="write it as text")
    if isinstance(value, float):  # numpy.float64 is a float
        if not math.isfinite(value):
            raise InvalidInput(f"{value} at {path}", cure="a finite number, or null with a reason beside it")
        return float(value) + 0.0
    if isinstance(value, Mapping):
        out: dict[str, Any] = {}
        for key, item in value.items():
            if not isinstance(key, str):
                raise InvalidInput(f"key {key!r} at {path} is not text", cure="text keys")
            name = _text(key, path)
            if name in out:
                raise InvalidInput(f"key {name!r} stands twice at {path} once written in one Unicode form")
            out[name] = plain(item, f"{path}.{name}")
        return out
    if isinstance(value, Sequence) and not isinstance(value, bytes | bytearray):
        return [plain(item, f"{path}[{i}]") for i, item in enumerate(value)]
    if hasattr(value, "item") and callable(value.item) and getattr(value, "ndim", None) == 0:
        return plain(value.item(), path)  # NumPy integers and booleans
    raise InvalidInput(
        f"{type(value).__name__} at {path} has no canonical form", cure="text, numbers, lists, mappings"
    )


def _text(value: str, path: str) -> str:
    try:
        value.encode()
    except UnicodeEncodeError as error:
        raise InvalidInput(f"half a character at {path}: {error.reason}", cure="whole characters") from error
    return unicodedata.normalize("NFC", value)


def canonical_json(value: Any) -> bytes:
    """RFC 8785 bytes of a plain value."""
    return rfc8785.dumps(plain(value))


def sha256_hex(data: bytes) -> str:
    """SHA-256 as 64 lower-case hexadecimal digits."""
    return hashlib.sha256(data).hexdigest()


def digest(value: Any) -> str:
    """SHA-256 of the canonical JSON of a value."""
    return sha256_hex(canonical_json(value))
