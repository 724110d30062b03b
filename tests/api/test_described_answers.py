"""What the endpoints answer is what the OpenAPI description says: every name, every type, nothing besides."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import pytest
from django.test import Client
from jsonschema import Draft202012Validator

from kinetics_db.accounts.selectors import user_named
from tests.access.world import World, make_world, undone
from tests.api.fuzzing import Operation, operations_of, resolved
from tests.factories.tokens import make_token

JSON = "application/json"


@pytest.fixture
def world(db: None) -> World:
    return make_world()


def closed(part: Any) -> Any:
    """A described shape that takes no names besides its own."""
    if isinstance(part, Mapping):
        found = {key: closed(value) for key, value in part.items()}
        return {**found, "additionalProperties": False} if "properties" in found else found
    return [closed(value) for value in part] if isinstance(part, list) else part


def shape_of(operation: Operation, status: int, schema: Mapping[str, Any]) -> Any:
    """The described shape of an answer as JSON; None where it is described as something else."""
    content = resolved(operation.described["responses"][str(status)], schema).get("content", {})
    return closed(content[JSON]["schema"]) if JSON in content else None


def test_every_answer_has_the_described_shape(world: World) -> None:
    client = Client()
    client.force_login(user_named("mira"))
    token = make_token(user_named("mira"), "spare")[0]
    schema, every = operations_of(world, token_id=token.pk)
    wrong, compared = [], 0
    for operation in every:
        good = operation.good()
        with undone():
            response = client.generic(
                operation.verb, good.path, good.body, good.content_type, headers=dict(good.headers)
            )
        name = f"{operation.verb} {operation.template}"
        if str(response.status_code) not in operation.described["responses"]:
            wrong.append(f"{name}: {response.status_code} is not described")
            continue
        shape = shape_of(operation, response.status_code, schema)
        if shape is None or response["Content-Type"] != JSON:
            continue
        compared += 1
        errors = Draft202012Validator(shape).iter_errors(json.loads(response.content))
        wrong += [f"{name} {error.json_path}: {error.message:.300}" for error in errors]
    assert not wrong, "\n".join(wrong)
    assert compared > 40, compared


def test_a_wrong_answer_would_be_found(world: World) -> None:
    schema, every = operations_of(world, token_id=1)
    (members,) = [one for one in every if (one.name, one.verb) == ("members", "GET")]
    validator = Draft202012Validator(shape_of(members, 200, schema))
    assert validator.is_valid({"items": [{"user": "mira", "role": "owner"}]})
    for wrong in ({"user": "mira", "role": "king"}, {"user": 1, "role": "owner"}, {"user": "mira"},
                  {"user": "mira", "role": "owner", "password": "x"}):  # fmt: skip
        assert not validator.is_valid({"items": [wrong]})
