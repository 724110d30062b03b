"""Hostile requests made from the OpenAPI description: for every operation, its places and what is put into them."""

from __future__ import annotations

import base64
import json
import random
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any
from urllib.parse import quote

from tests.access.endpoints import ENDPOINTS, Keys, Method, address, encoded

JSON = "application/json"
MANY = 100_000
MARKUP = "<script>alert(1)</script>"
SAMPLE = 8
"""Values that are tried in each place of a body, of `VALUES`; every place gets others. Headers likewise."""

#: JSON as it is written, so that it may be what no encoder writes.
VALUES: tuple[str, ...] = (
    "null", "true", "0", "-1", "1e400", "-1e-400", "1" + "0" * 30, "9223372036854775808", "0.1", '""', '"  "',
    '"1e400"', '"-1"', f'"{"x" * MANY}"', '"a\\u0000b"', '"\\ud800"', '"\\u202etxt.exe\\u200b"', '"\\u0007\\u001b[31m"',
    json.dumps(MARKUP), '"../../etc/passwd"', '"9999-99-99"', "[]", "[[[]]]", "[null]", "{}", '{"a":1,"a":2}',
    '{"value":{},"unit":[]}', "[" * 60 + "]" * 60, "[" + ",".join("0" * 2000) + "]", "NaN", "'x'", '"\U0001f9ea"',
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
    "a form without parts": (b"--b--\r\n", "multipart/form-data; boundary=b"),
    "a form that breaks off": (b'--b\r\nContent-Disposition: form-data; name="file"', "multipart/form-data; boundary=b"),
    "a form with a boundary of markup": (b"x", f"multipart/form-data; boundary={MARKUP}"),
    "XML": (b'<?xml version="1.0"?><!DOCTYPE x [<!ENTITY y "z">]><x>&y;</x>', "application/xml"),
    "no media type at all": (b"{}", "????"),
    "a media type without end": (b"{}", "application/" + "x" * 10_000),
    "another charset": (b"{}", f"{JSON}; charset=nonsense"),
}  # fmt: skip

TEXTS: tuple[str, ...] = (
    "", " ", "0", "-1", "1e400", "nan", "1" + "0" * 30, "9223372036854775808", "x" * 6000, "\0", "\x1b[31m", "\u202ex\u200b",
    "\U0001f9ea", MARKUP, "../../etc/passwd", "%", "{}", "[]", "null", "';--", "\u0663", "a\nb",
)  # fmt: skip

PLACES: tuple[str, ...] = (
    "0", "-1", "1" + "0" * 30, "9223372036854775807", "9223372036854775808", "1e400", "1.0", "%00", "%FF%FE", "%ED%A0%80",
    "..", "..%2F..", "%2e%2e", quote(MARKUP), quote("\u202ex"), "x" * 6000, "%20", "0x1", "\u0663", "a%0Ab", "%0d%0aSet-Cookie:x=1",
)  # fmt: skip


def cursor_of(plain: Any) -> str:
    return base64.urlsafe_b64encode(json.dumps(plain).encode()).decode().rstrip("=")


CURSORS: tuple[str, ...] = (
    "x", "====", "\u00e9", base64.b64encode(b"[" * 1400).decode(), cursor_of({}), cursor_of([1, 2, 3]), cursor_of(["after"]),
    *(
        cursor_of(["after", order, values])
        for order in (["-created", "-id"], ["name", "id"], ["slug", "id"], ["-number", "-id"], ["code", "id"])
        for values in ([{}, 1], ["x", "y"], [None, None], [True, False], [1e308, 10**30], ["0001-01-01T00:00+23:59", 1],
                       ["\0", 1], ["\ud800", 1], [-(2**63), 2**63 - 1], ["9999-12-31T23:59:59-23:59", 0], [1, 2, 3])
    ),
)  # fmt: skip

HEADERS: tuple[dict[str, str], ...] = (
    {"Accept": ""}, {"Accept": "*/*;q=0"}, {"Accept": ",,,;;;===" * 50}, {"Accept": "text/html"}, {"Accept": "image/*"},
    {"Accept": "application/json; version=../.."}, {"Accept": "application/json;q=abc"}, {"Accept": "x" * 9000},
    {"Accept": "\xe9/\xff"}, {"Accept": "text/csv;q=0.9,application/vnd.apache.parquet"},
    {"Accept": ",".join(["a/b"] * 2000)}, {"Accept-Encoding": "nonsense;q=9"}, {"Accept-Language": MARKUP},
    {"If-None-Match": "*"}, {"If-None-Match": '"'}, {"If-None-Match": "W/"}, {"If-None-Match": '"x",' * 3000},
    {"If-None-Match": "\xe9"}, {"If-Match": '"'}, {"If-Match": "x" * 9000}, {"If-Match": 'W/"x"'}, {"If-Match": "\xe9, \"\xff\""},
    {"If-Modified-Since": "never"}, {"If-Range": '"x"'}, {"Range": "bytes=0-"}, {"Range": "bytes=5-1,-9" + "9" * 99},
    {"Range": "rows=1-2"}, {"X-HTTP-Method-Override": "DELETE"}, {"X-Method-Override": "PUT"}, {"X-HTTP-Method": "NONSENSE"},
    {"Idempotency-Key": " "}, {"Idempotency-Key": "x" * 256}, {"Idempotency-Key": "\xe9"}, {"Idempotency-Key": "a b"},
    {"Idempotency-Key": "\x07"}, {"Content-Encoding": "gzip"}, {"Expect": "nonsense"}, {"Transfer-Encoding": "chunked"},
    {"X-Forwarded-For": "\xff" * 99}, {"X-Forwarded-Host": "elsewhere.example"}, {"Origin": "null"}, {"Cookie": ";=;\xe9=\xff; sessionid=" + "x" * 5000},
    {"Authorization": "Bearer"}, {"Authorization": "Bearer rw_" + "x" * 9000}, {"Authorization": "bearer \xe9\xff"},
    {"Authorization": "Basic !!!"}, {"Authorization": "Digest x=y"}, {"Authorization": MARKUP},
)  # fmt: skip


@dataclass(frozen=True)
class Try:
    """A request, and what is hostile in it."""

    operation: Operation
    what: str
    path: str
    body: bytes = b""
    content_type: str = ""
    headers: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Operation:
    """A method of an address as the description has it, and a request that is in order."""

    name: str
    verb: str
    template: str
    described: Mapping[str, Any]
    method: Method
    keys: Keys
    schema: Mapping[str, Any]
    """What the description says of a JSON body, `{}` for none."""

    def good(self) -> Try:
        path = address(self.name, self.keys, self.method.query)
        body, content_type = encoded(self.body())
        headers = {"If-Match": "*"} if self.method.takes_match else {}
        headers |= {"Accept": "text/html"} if self.name == "docs" else {}
        return Try(self, "in order", path, body, content_type, headers)

    def body(self) -> Any:
        return self.method.body(self.keys) if self.method.body else None

    def parameters(self, where: str) -> list[str]:
        return [one["name"] for one in self.described.get("parameters", ()) if one["in"] == where]


def operations(schema: Mapping[str, Any], keys: Keys, templates: Mapping[str, str]) -> list[Operation]:
    """Every operation; ``templates`` are the addresses of the description by the name of the endpoint."""
    found = []
    for name, template in templates.items():
        for verb, method in ENDPOINTS[name].items():
            described = schema["paths"][template][verb.lower()]
            content = described.get("requestBody", {}).get("content", {})
            body = next(
                (resolved(one["schema"], schema) for kind, one in content.items() if "json" in kind), {}
            )
            found.append(Operation(name, verb, template, described, method, keys, body))
    return found


def resolved(part: Any, schema: Mapping[str, Any]) -> Any:
    """A part of the description with its references filled in."""
    if isinstance(part, Mapping):
        if "$ref" in part:
            target: Any = schema
            for step in part["$ref"].removeprefix("#/").split("/"):
                target = target[step]
            return resolved(target, schema)
        return {key: resolved(value, schema) for key, value in part.items()}
    return [resolved(value, schema) for value in part] if isinstance(part, list) else part


def tries(operation: Operation) -> Iterator[Try]:
    """Everything that is tried on an operation."""
    yield from in_the_address(operation)
    yield from in_the_query(operation)
    if operation.verb != "GET":
        yield from as_the_body(operation)
        yield from in_the_body(operation)
    good = operation.good()
    for header in chosen_by(operation).sample(HEADERS, 2 * SAMPLE):
        what = f"header {next(iter(header.items()))!r:.60}"
        yield replace(good, what=what, headers={**good.headers, **header})


def chosen_by(operation: Operation) -> random.Random:
    """The same choices every time, other ones for each operation."""
    return random.Random(f"{operation.verb} {operation.template}")


def in_the_address(operation: Operation) -> Iterator[Try]:
    good = operation.good()
    for name in operation.parameters("path"):
        for place in PLACES:
            others = {**operation.keys, **aliases(operation)}
            path = operation.template.replace(f"{{{name}}}", place).format(**others)
            query = good.path.partition("?")[2]
            yield replace(good, what=f"{name} is {place:.30}", path=f"{path}?{query}")


def aliases(operation: Operation) -> dict[str, Any]:
    return {"fit_id": operation.keys["open_fit_id"]} if operation.name in ("stop-fit", "retry-fit") else {}


def in_the_query(operation: Operation) -> Iterator[Try]:
    good = operation.good()
    path, _, given = good.path.partition("?")
    kept = [pair for pair in given.split("&") if pair]
    for name in operation.parameters("query"):
        others = [pair for pair in kept if not pair.startswith(f"{name}=")]
        for text in CURSORS if name == "cursor" else TEXTS:
            pairs = [*others, f"{name}={quote(text, errors='surrogatepass')}"]
            yield replace(good, what=f"?{name}={text!r:.30}", path=f"{path}?{'&'.join(pairs)}")
        yield replace(good, what=f"?{name} without a value", path=f"{path}?{'&'.join([*others, name])}")
        twice = "&".join([*others, f"{name}=1", f"{name}[]=2", f"{name}=%FF%ED%A0%80"])
        yield replace(good, what=f"?{name} several times", path=f"{path}?{twice}")
    strange = {
        "an unknown name": [f"{quote(MARKUP)}={quote(MARKUP)}"],
        "a format": ["format=api"],
        "a method": ["_method=DELETE"],
        "a name of nothing": ["=1", "&&=", ";"],
        "broken percents": ["%=%zz&%00=%00"],
        "not UTF-8": ["%FF=%FF"],
        "very many": [f"p{i}=1" for i in range(2_000)],
        "a long value": [f"size={'1' * MANY}"],
        "a field of a related row": ["project__slug=x&created_by__password__startswith=a"],
    }
    for what, pairs in strange.items():
        yield replace(good, what=f"query with {what}", path=f"{path}?{'&'.join([*kept, *pairs])}")


def as_the_body(operation: Operation) -> Iterator[Try]:
    good = operation.good()
    for what, (body, content_type) in BODIES.items():
        yield replace(good, what=f"the body is {what}", body=body, content_type=content_type)


def in_the_body(operation: Operation) -> Iterator[Try]:
    """Each place of a body that is in order, and each that the description names, with some of the values."""
    body = operation.body()
    if body is None or not operation.schema:
        return
    good, chosen = operation.good(), chosen_by(operation)
    whole = filled(body, operation.schema)
    for place in places(whole):
        for value in ("absent", *chosen.sample(VALUES, SAMPLE)):
            changed = put(whole, place, value)
            what = f"{'.'.join(map(str, place))} is {value:.40}"
            yield replace(good, what=what, body=changed.encode("utf-8", "surrogatepass"))


def filled(body: Any, schema: Mapping[str, Any], depth: int = 0) -> Any:
    """A body with every further place that the description names, null where nothing better is known."""
    if not isinstance(body, dict) or depth > 4:
        return body
    properties = schema.get("properties", {})
    found = {name: filled(value, properties.get(name, {}), depth + 1) for name, value in body.items()}
    for name, part in properties.items():
        if name not in found and not part.get("readOnly"):
            found[name] = sketch(part)
    return found


def sketch(part: Mapping[str, Any], depth: int = 0) -> Any:
    """The simplest value of a described type, so that its own places can be reached."""
    if depth > 4 or "properties" not in part:
        items = part.get("items") if depth <= 4 else None
        return [sketch(items, depth + 1)] if isinstance(items, Mapping) and "properties" in items else None
    return {
        name: sketch(inner, depth + 1)
        for name, inner in part["properties"].items()
        if not inner.get("readOnly")
    }


def places(value: Any, at: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """Where something stands in plain values, outermost first."""
    if at:
        yield at
    inner = (
        value.items() if isinstance(value, dict) else enumerate(value[:2]) if isinstance(value, list) else ()
    )
    for name, part in inner:
        yield from places(part, (*at, name))


HERE = "\u2603 here"


def put(value: Any, place: tuple[str | int, ...], text: str) -> str:
    """JSON of plain values with the text at a place; other places that were only sketched are left out."""
    marked = _marked(value, place, text == "absent")
    return json.dumps(marked, ensure_ascii=False).replace(f'"{HERE}"', text)


def _marked(value: Any, place: tuple[str | int, ...], absent: bool) -> Any:
    if not place:
        return HERE
    first, rest = place[0], place[1:]
    if isinstance(value, dict):
        kept = {k: v for k, v in value.items() if v is not None or k == first}
        return {
            k: _marked(v, rest, absent) if k == first else v
            for k, v in kept.items()
            if not (absent and k == first and not rest)
        }
    kept_list = list(value)
    if absent and not rest:
        del kept_list[int(first)]
    else:
        kept_list[int(first)] = _marked(kept_list[int(first)], rest, absent)
    return kept_list
