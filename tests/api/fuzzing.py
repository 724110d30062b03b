"""Hostile requests made from the OpenAPI description: for every operation, its places and what is put into them."""

from __future__ import annotations

import json
import random
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, TypeVar
from urllib.parse import quote

from drf_spectacular.generators import SchemaGenerator

from api.urls import urlpatterns
from kinetics_db.materials.services import Portion, make_up_stock
from tests.access.endpoints import ENDPOINTS, Keys, Method, address, encoded
from tests.access.world import World
from tests.api.hostile_requests import BODIES, CURSORS, HEADERS, MANY, MARKUP, PLACES, TEXTS, VALUES
from tests.factories.people import make_member

NOT_DESCRIBED = ("docs", "elsewhere")
"""Pages to read the description, and what is nowhere."""

T = TypeVar("T")
Place = tuple[str | int, ...]
"""Names and positions that lead to a part of plain values."""

AMOUNT = {"value": 1, "unit": "mL", "uncertainty": 0.1}
CHARGE = {"stock": "S-1", "amount": AMOUNT, "note": "last"}
#: Bodies with more in them than the access tests need.
RICH: Mapping[tuple[str, str], dict[str, Any]] = {
    ("projects", "POST"): {"description": "d"},
    ("compounds", "POST"): {
        "formula": "C2H6O",
        "molar_mass": 46.07,
        "density": {"value": 0.789, "unit": "g/mL"},
        "hazard_statements": ["H225"],
        "reason": "looked up",
    },
    ("lots", "POST"): {"purity": 0.9, "purity_uncertainty": 0.01, "supplier_note": "n", "reason": "r"},
    ("stocks", "POST"): {
        "solvent": "water",
        "made_on": "2026-03-01",
        "temperature": {"value": 20, "unit": "degC"},
        "reason": "r",
    },
    ("runs", "POST"): {
        "charges": [CHARGE, {"compound": "alcohol", "amount": {"value": 2, "unit": "mM"}}],
        "total_volume": {"value": 10, "unit": "mL"},
        "temperature": {"value": 40, "unit": "degC", "uncertainty": 0.1},
        "atmosphere": "argon",
        "started": "2026-03-09T09:30:00+01:00",
        "replicate_of": "K01",
        "control_kind": "",
        "notes": "n",
        "sections": {"clock": {"zero": "z", "first contact": {"value": 5, "unit": "s"}}},
    },
    ("run", "PATCH"): {"charges": [CHARGE], "total_volume": {"value": 10, "unit": "mL"}, "reason": "r"},
    ("fits", "POST"): {
        "casting": {"compounds": {"alcohol": "alcohol"}, "columns": {"ketone": None}},
        "settings": {"seed": 1, "starts": 2, "max_seconds": 60},
        "start_concentrations": [{"species": "alcohol", "start": 0.1, "scope": "own per run"}],
        "without_owners": [],
    },
}


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

    @property
    def title(self) -> str:
        return f"{self.verb} {self.template}"

    @property
    def places(self) -> Keys:
        """What stands in the address."""
        waiting = self.name in ("stop-fit", "retry-fit")
        return {**self.keys, "fit_id": self.keys["open_fit_id"]} if waiting else self.keys

    def body(self) -> Any:
        body = self.method.body(self.keys) if self.method.body else None
        return {**body, **RICH.get((self.name, self.verb), {})} if body is not None else None

    def parameters(self, where: str) -> list[str]:
        return [one["name"] for one in self.described.get("parameters", ()) if one["in"] == where]


def operations_of(world: World, **more: Any) -> tuple[Mapping[str, Any], list[Operation]]:
    """The description, and every operation with a request of the world's owner."""
    schema = json.loads(json.dumps(SchemaGenerator().get_schema(request=None, public=True), default=str))
    project = world.study.project
    make_member(project, "reader", "nina")
    portion = Portion(1.0, "g", compound="alcohol", uncertainty=0.01)
    where: dict[str, Any] = {"user": project.created_by, "project_id": project.pk}
    make_up_stock(**where, code="S-1", portions=[portion], volume=(100.0, "mL"), volume_uncertainty=0.1)
    keys = {**world.keys, "username": "nina", "number": 1, "form": "csv", "token_id": 1, **more}
    named = {p.name: "/api/v1/" + re.sub(r"<\w+:(\w+)>", r"{\1}", str(p.pattern)) for p in urlpatterns}
    described = {name: path for name, path in named.items() if name not in NOT_DESCRIBED}
    return schema, operations(schema, keys, described)


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


@dataclass(frozen=True)
class Choice:
    """Some of the hostile things, the same ones every time and others in each place; all of them when thorough."""

    thorough: bool = False

    def of(self, things: Sequence[T], number: int, where: str) -> Sequence[T]:
        if self.thorough or number >= len(things):
            return things
        return random.Random(where).sample(things, number)


def tries(operation: Operation, choice: Choice) -> Iterator[Try]:
    """What is tried on an operation."""
    yield operation.good()
    yield from in_the_address(operation, choice)
    yield from in_the_query(operation, choice)
    if operation.verb != "GET":
        yield from as_the_body(operation, choice)
        yield from in_the_body(operation, choice)
    good = operation.good()
    for header in choice.of(HEADERS, 10, operation.title):
        what = f"header {next(iter(header.items()))!r:.60}"
        yield replace(good, what=what, headers={**good.headers, **header})


def in_the_address(operation: Operation, choice: Choice) -> Iterator[Try]:
    good = operation.good()
    for name in operation.parameters("path"):
        for place in choice.of(PLACES, 6, f"{operation.title} {name}"):
            path = operation.template.replace(f"{{{name}}}", place).format(**operation.places)
            query = good.path.partition("?")[2]
            yield replace(good, what=f"{name} is {place:.30}", path=f"{path}?{query}")


def in_the_query(operation: Operation, choice: Choice) -> Iterator[Try]:
    good = operation.good()
    path, _, given = good.path.partition("?")
    kept = [pair for pair in given.split("&") if pair]
    for name in operation.parameters("query"):
        others = [pair for pair in kept if not pair.startswith(f"{name}=")]
        for text in choice.of(CURSORS if name == "cursor" else TEXTS, 6, f"{operation.title} {name}"):
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


def as_the_body(operation: Operation, choice: Choice) -> Iterator[Try]:
    good = operation.good()
    for what, (body, content_type) in choice.of(list(BODIES.items()), 12, operation.title):
        yield replace(good, what=f"the body is {what}", body=body, content_type=content_type)


def in_the_body(operation: Operation, choice: Choice) -> Iterator[Try]:
    """Each place of a body that is in order, and each that the description names, with some of the values."""
    body = operation.body()
    if body is None or not operation.schema:
        return
    good, whole = operation.good(), filled(body, operation.schema)
    for place in places(whole):
        where = ".".join(map(str, place))
        for value in (ABSENT, *choice.of(VALUES, 4, f"{operation.title} {where}")):
            changed = put(whole, body, place, value)
            yield replace(good, what=f"{where} is {value:.40}", body=changed.encode("utf-8", "surrogatepass"))


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


def places(value: Any, at: Place = ()) -> Iterator[Place]:
    """Where something stands in plain values, outermost first."""
    if at:
        yield at
    inner = (
        value.items() if isinstance(value, dict) else enumerate(value[:2]) if isinstance(value, list) else ()
    )
    for name, part in inner:
        yield from places(part, (*at, name))


HERE = "\u2603 here"
ABSENT = "absent"


def put(whole: Any, own: Any, place: Place, text: str) -> str:
    """JSON of the own values with the text at a place of the whole, which may be one that they do not have."""
    marked = _marked(whole, own, place, text == ABSENT)
    return json.dumps(marked, ensure_ascii=False).replace(f'"{HERE}"', text)


def _marked(whole: Any, own: Any, place: Place, absent: bool) -> Any:
    if not place:
        return HERE
    first, rest = place[0], place[1:]
    gone = absent and not rest
    if isinstance(whole, dict):
        mine = own if isinstance(own, dict) else {k: v for k, v in whole.items() if v is not None}
        changed = {} if gone else {first: _marked(whole[first], mine.get(first), rest, absent)}
        return {**{k: v for k, v in mine.items() if k != first}, **changed}
    mine = own if isinstance(own, list) and len(own) == len(whole) else whole
    at = int(first)
    return [*mine[:at], *([] if gone else [_marked(whole[at], mine[at], rest, absent)]), *mine[at + 1 :]]
