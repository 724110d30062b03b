"""What hostile and clumsy scripts send: bodies, values in them, texts, places in addresses, cursors, headers."""

from __future__ import annotations

import base64
import json
from collections.abc import Mapping
from typing import Any
from urllib.parse import quote

JSON = "application/json"
FORM = "multipart/form-data; boundary=b"
MANY = 100_000
MARKUP = "<script>alert(1)</script>"
#: JSON as it is written, so that it may be what no encoder writes.
VALUES: tuple[str, ...] = (
    "null", "true", "0", "-1", "1e400", "-1e-400", "1" + "0" * 30, "9223372036854775808", "0.1", '""', '"  "',
    '"1e400"', '"-1"', f'"{"x" * MANY}"', '"a\\u0000b"', '"\\ud800"', '"\\u202etxt.exe\\u200b"',
    '"\\u0007\\u001b[31m"',
    json.dumps(MARKUP), '"../../etc/passwd"', '"9999-99-99"', "[]", "[[[]]]", "[null]", "{}", '{"a":1,"a":2}',
    '{"value":{},"unit":[]}', "[" * 60 + "]" * 60, "[" + ",".join("0" * 2000) + "]", "NaN", "'x'",
    '"\U0001f9ea"',
)  # fmt: skip

#: Whole bodies with their media types.
BODIES: Mapping[str, tuple[bytes, str]] = {
    "nothing": (b"", JSON),
    "nothing of no type": (b"{}", ""),
    "null": (b"null", JSON),
    "a list": (b"[]", JSON),
    "a text": (b'"x"', JSON),
    "a number": (b"1", JSON),
    "a text without end": (b'"' + b"x" * MANY, JSON),
    "half an object": (b'{"name": ', JSON),
    "two objects": (b"{}{}", JSON),
    "a name twice": (b'{"name": "a", "name": "b"}', JSON),
    "deeper than anybody reads": (b'{"a":' * MANY, JSON),
    "brackets without end": (b"[" * MANY, JSON),
    "not UTF-8": (b'{"name": "\xff\xfe"}', JSON),
    "a surrogate as bytes": (b'{"name": "\xed\xa0\x80"}', JSON),
    "UTF-16": ('{"name": "x"}'.encode("utf-16"), f"{JSON}; charset=utf-16"),
    "a byte order mark": (b"\xef\xbb\xbf{}", JSON),
    "a NUL": (b'{"name": "a\0b"}', JSON),
    "infinite": (b'{"name": Infinity}', JSON),
    "very many names": (json.dumps({f"n{i}": 0 for i in range(20_000)}).encode(), JSON),
    "a name without end": (json.dumps({"n" * MANY: 1}).encode(), JSON),
    "plain text": (b"name=x", "text/plain"),
    "a form": (b"name=x&reason=y", "application/x-www-form-urlencoded"),
    "a form without a boundary": (b"name=x", "multipart/form-data"),
    "a form without parts": (b"--b--\r\n", FORM),
    "a form that breaks off": (b'--b\r\nContent-Disposition: form-data; name="file"', FORM),
    "a form with a boundary of markup": (b"x", f"multipart/form-data; boundary={MARKUP}"),
    "XML": (b'<?xml version="1.0"?><!DOCTYPE x [<!ENTITY y "z">]><x>&y;</x>', "application/xml"),
    "no media type at all": (b"{}", "????"),
    "a media type without end": (b"{}", "application/" + "x" * 10_000),
    "another charset": (b"{}", f"{JSON}; charset=nonsense"),
}  # fmt: skip

TEXTS: tuple[str, ...] = (
    "", " ", "0", "-1", "1e400", "nan", "1" + "0" * 30, "9223372036854775808", "x" * 6000, "\0",
    "\x1b[31m", "\u202ex\u200b",
    "\U0001f9ea", MARKUP, "../../etc/passwd", "%", "{}", "[]", "null", "';--", "\u0663", "a\nb",
)  # fmt: skip

PLACES: tuple[str, ...] = (
    "0", "-1", "1" + "0" * 30, "9223372036854775807", "9223372036854775808", "1e400", "1.0", "%00",
    "%FF%FE", "%ED%A0%80",
    "..", "..%2F..", "%2e%2e", quote(MARKUP), quote("\u202ex"), "x" * 6000, "%20", "0x1", "\u0663",
    "a%0Ab", "%0d%0aSet-Cookie:x=1",
)  # fmt: skip


def cursor_of(plain: Any) -> str:
    return base64.urlsafe_b64encode(json.dumps(plain).encode()).decode().rstrip("=")


CURSORS: tuple[str, ...] = (
    "x", "====", "\u00e9", base64.b64encode(b"[" * 1400).decode(), cursor_of({}), cursor_of([1, 2, 3]),
    cursor_of(["after"]),
    *(
        cursor_of(["after", order, values])
        for order in (["-created", "-id"], ["name", "id"], ["slug", "id"], ["-number", "-id"], ["code", "id"])
        for values in ([{}, 1], ["x", "y"], [None, None], [True, False], [1e308, 10**30], ["0001-01-01T00:00+23:59", 1],
                       ["\0", 1], ["\ud800", 1], [-(2**63), 2**63 - 1], ["9999-12-31T23:59:59-23:59", 0],
                       [1, 2, 3])
    ),
)  # fmt: skip

HEADERS: tuple[dict[str, str], ...] = (
    {"Accept": ""}, {"Accept": "*/*;q=0"}, {"Accept": ",,,;;;===" * 50}, {"Accept": "text/html"},
    {"Accept": "image/*"},
    {"Accept": "application/json; version=../.."}, {"Accept": "application/json;q=abc"}, {"Accept": "x" * 9000},
    {"Accept": "\xe9/\xff"}, {"Accept": "text/csv;q=0.9,application/vnd.apache.parquet"},
    {"Accept": ",".join(["a/b"] * 2000)}, {"Accept-Encoding": "nonsense;q=9"}, {"Accept-Language": MARKUP},
    {"If-None-Match": "*"}, {"If-None-Match": '"'}, {"If-None-Match": "W/"}, {"If-None-Match": '"x",' * 3000},
    {"If-None-Match": "\xe9"}, {"If-Match": '"'}, {"If-Match": "x" * 9000}, {"If-Match": 'W/"x"'},
    {"If-Match": "\xe9, \"\xff\""},
    {"If-Modified-Since": "never"}, {"If-Range": '"x"'}, {"Range": "bytes=0-"},
    {"Range": "bytes=5-1,-9" + "9" * 99},
    {"Range": "rows=1-2"}, {"X-HTTP-Method-Override": "DELETE"}, {"X-Method-Override": "PUT"},
    {"X-HTTP-Method": "NONSENSE"},
    {"Idempotency-Key": " "}, {"Idempotency-Key": "x" * 256}, {"Idempotency-Key": "\xe9"},
    {"Idempotency-Key": "a b"},
    {"Idempotency-Key": "\x07"}, {"Content-Encoding": "gzip"}, {"Expect": "nonsense"},
    {"Transfer-Encoding": "chunked"},
    {"X-Forwarded-For": "\xff" * 99}, {"X-Forwarded-Host": "elsewhere.example"}, {"Origin": "null"},
    {"Cookie": ";=;\xe9=\xff; sessionid=" + "x" * 5000},
    {"Authorization": "Bearer"}, {"Authorization": "Bearer rw_" + "x" * 9000},
    {"Authorization": "bearer \xe9\xff"},
    {"Authorization": "Basic !!!"}, {"Authorization": "Digest x=y"}, {"Authorization": MARKUP},
)  # fmt: skip
