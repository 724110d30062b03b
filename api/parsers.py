"""Bodies of requests: strict JSON with the place of what is wrong, and forms with files."""

from __future__ import annotations

import json
import re
from collections.abc import Callable, Mapping
from typing import IO, Any

from django.conf import settings
from rest_framework.parsers import JSONParser, MultiPartParser

from api.exceptions import BodyTooLarge, MalformedBody
from kinetics_db.errors import Problem

DEEPEST = 40
LARGEST_WHOLE = 2**53
LARGEST_NUMBER = 1e300
FORM_BYTES = 1024 * 1024
"""What a form may hold beside its file."""

TOKEN = re.compile(r'"(?:\\.|[^"\\])*"?|[^\s"{}\[\],:]+')


class StrictJSONParser(JSONParser):
    """An object in JSON (RFC 8259), as everybody reads it the same way.

    Refused with the place: repeated names, NaN and infinities, numbers that no double holds, characters that no
    database holds, depth without end.
    """

    def parse(
        self,
        stream: IO[bytes],
        media_type: str | None = None,
        parser_context: Mapping[str, Any] | None = None,
    ) -> dict[str, Any]:
        return strict_json(stream.read())  # Django has seen to its length


class FileParser(MultiPartParser):
    """multipart/form-data with a file, refused before it is read when it is too large."""

    def parse(
        self,
        stream: IO[bytes],
        media_type: str | None = None,
        parser_context: Mapping[str, Any] | None = None,
    ) -> Any:
        most = settings.MAX_FILE_BYTES + FORM_BYTES
        request = (parser_context or {}).get("request")
        length = str(request.META.get("CONTENT_LENGTH") or 0) if request is not None else "0"
        if length.isdigit() and int(length) > most:
            raise BodyTooLarge(most)
        return super().parse(stream, media_type, parser_context)


def strict_json(data: bytes) -> dict[str, Any]:
    """The object that a body holds; MalformedBody says what is wrong and where."""
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise MalformedBody(Problem(f"byte {error.start + 1} is no UTF-8", cure="JSON in UTF-8")) from error
    try:
        value = json.loads(
            text,
            object_pairs_hook=_once_each,
            parse_constant=_refuse_constant,
            parse_float=_number,
            parse_int=_whole,
        )
    except json.JSONDecodeError as error:
        message = f"not JSON: {error.msg}"
        raise MalformedBody(Problem(message, line=error.lineno, column=error.colno)) from error
    except RecursionError as error:
        raise MalformedBody(Problem("nested too deeply", cure=f"at most {DEEPEST} levels")) from error
    except _Refused as refused:
        line, column = _place(text, refused.token)
        raise MalformedBody(
            Problem(refused.message, line=line, column=column, field=refused.field, cure=refused.cure)
        ) from None
    if not isinstance(value, dict):
        raise MalformedBody(Problem("the body is not an object", cure='{"name": value, ...}'))
    _require_storable(value)
    return value


class _Refused(Exception):
    def __init__(
        self, message: str, *, cure: str, token: Callable[[str], bool] | None = None, field: str | None = None
    ):
        self.message, self.cure, self.token, self.field = message, cure, token, field


def _once_each(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for name, value in pairs:
        if name in found:
            raise _Refused(f"{name!r:.80} stands twice", field=name[:80], cure="each name once in an object")
        found[name] = value
    return found


def _refuse_constant(name: str) -> Any:
    raise _Refused(
        f"{name} is no JSON", token=lambda t: t == name, cure="a number, or null where it is missing"
    )


def _number(text: str) -> float:
    value = float(text)
    if abs(value) > LARGEST_NUMBER:
        raise _Refused(
            f"{text:.40} is too large", token=lambda t: t == text, cure=f"at most {LARGEST_NUMBER:g}"
        )
    return value


def _whole(text: str) -> int:
    if len(text) > 17 or abs(int(text)) > LARGEST_WHOLE:
        raise _Refused(
            f"{text:.40} is too large for a whole number",
            token=lambda t: t == text,
            cure=f"at most {LARGEST_WHOLE}, or a number with an exponent",
        )
    return int(text)


def _place(text: str, is_it: Callable[[str], bool] | None) -> tuple[int | None, int | None]:
    """Line and column, from 1, of the first token outside strings that is meant."""
    if is_it is None:
        return None, None
    for match in TOKEN.finditer(text):
        if is_it(match.group()):
            before = text[: match.start()]
            return before.count("\n") + 1, match.start() - (before.rfind("\n") + 1) + 1
    return None, None


def _require_storable(value: dict[str, Any]) -> None:
    """No level beyond the deepest, no NUL and no half of a surrogate pair in any text."""
    waiting: list[tuple[str, Any, int]] = [("", value, 1)]
    while waiting:
        where, part, depth = waiting.pop()
        if depth > DEEPEST:
            raise MalformedBody(Problem("nested too deeply", cure=f"at most {DEEPEST} levels"))
        if isinstance(part, dict):
            for name, inner in part.items():
                _require_text(name, where or "a name")
                waiting.append((f"{where}.{name}" if where else name, inner, depth + 1))
        elif isinstance(part, list):
            waiting.extend((f"{where}.{i}", inner, depth + 1) for i, inner in enumerate(part, start=1))
        elif isinstance(part, str):
            _require_text(part, where)


def _require_text(text: str, where: str) -> None:
    if (bad := unstorable(text)) is not None:
        field = where.encode("ascii", "backslashreplace").decode()[:200]
        raise MalformedBody(
            Problem(f"U+{ord(bad):04X} cannot be stored", field=field, cure="text without such characters")
        )


def unstorable(text: str) -> str | None:
    """The first character that no database holds, None for none."""
    if text.isascii() and "\0" not in text:
        return None
    return next((c for c in text if c == "\0" or "\ud800" <= c <= "\udfff"), None)
