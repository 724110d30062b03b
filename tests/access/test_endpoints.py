"""Every endpoint of REST, every method and everybody who may ask: exactly who may see and do what."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import timedelta
from typing import Any

import pytest
from django.http.response import HttpResponseBase
from django.test import Client
from django.utils import timezone

from api.urls import urlpatterns
from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.materials.services import Portion, enter_lot, make_up_stock
from kinetics_db.projects.access import withdraw_access_token
from tests.access.endpoints import (
    ENDPOINTS,
    METHODS,
    PUBLIC,
    RECIPE,
    Keys,
    Method,
    address,
    encoded,
    fit_of,
    run_of,
    token_of,
)
from tests.access.world import OURS, RANK, World, add_elsewhere, make_world, undone
from tests.factories.people import make_member, make_project, make_user
from tests.factories.tokens import make_token

# The answers do not hang on the database; the second pass on SQLite need not repeat them.
pytestmark = pytest.mark.postgresql

DEAD, LIMITED, HERE, READING = "dead", "to another project", "to this project", "reading"
OTHER_METHODS_BY = ("nobody", "owner")
"""Who tries the methods that an endpoint does not have."""


@dataclass(frozen=True)
class Asker:
    """Somebody who asks: a person of a role, logged in or with a token that takes something away."""

    name: str
    rank: int
    client: Client
    headers: Mapping[str, str] = field(default_factory=dict)
    spare_token: int = 0
    limit: str = ""

    @property
    def by_token(self) -> bool:
        return bool(self.headers)

    def ask(self, method: str, path: str, body: Any = None, **headers: str) -> Any:
        data, content_type = encoded(body)
        return self.client.generic(method, path, data, content_type, headers={**self.headers, **headers})


@pytest.fixture
def world(db: None) -> World:
    """The world of the pages with a lot, a stock, and a member whom no test acts as."""
    made = make_world()
    owner, project = made.people["owner"], made.study.project
    where: dict[str, Any] = {"user": owner, "project_id": project.pk}
    enter_lot(**where, code="L-alcohol", compound="alcohol")
    portions = [Portion(1.0, "g", lot="L-alcohol")]
    make_up_stock(**where, code="S-alcohol", portions=portions, volume=(100.0, "mL"))
    make_member(project, "reader", "nina")
    made.keys |= {"username": "nina", "number": 1, "form": "csv"}
    return made


@pytest.fixture
def elsewhere(world: World) -> Keys:
    """Records of another project, which the owner sees too and nobody else of the first one."""
    return add_elsewhere(world)


def askers(world: World) -> list[Asker]:
    """Everybody, from nobody to the owner, and the tokens with each of their limits."""
    spare = {name: make_token(user, "spare")[0].pk for name, user in world.people.items()}
    logged_in = [Asker(role, RANK[role], world.client(role), spare_token=spare.get(role, 1)) for role in RANK]
    return [
        *logged_in,
        *(by_token(world, "owner", name, scope="write", limit=DEAD) for name in ("expired", "withdrawn")),
        by_token(world, "owner", "reading", scope="read", limit=READING),
        by_token(world, "owner", "elsewhere", scope="write", project="elsewhere", limit=LIMITED),
        by_token(world, "owner", "writing", scope="write"),
        by_token(world, "owner", "here", scope="write", project="oxidation", limit=HERE),
        by_token(world, "reader", "of a reader", scope="write"),
    ]


def by_token(world: World, role: str, name: str, *, limit: str = "", **limits: str) -> Asker:
    user = world.people[role]
    token, secret = make_token(user, name, **limits)
    if name == "expired":
        long_ago = timezone.now() - timedelta(days=9)
        AccessToken.objects.filter(pk=token.pk).update(created=long_ago - timedelta(days=1), expires=long_ago)
    if name == "withdrawn":
        withdraw_access_token(user=user, token_id=token.pk)
    headers = {"Authorization": f"Bearer {secret}"}
    client = Client(raise_request_exception=False)
    return Asker(f"{role}'s {name} token", RANK[role], client, headers, token.pk, limit)


def allowed(asker: Asker, method: Method | None, name: str) -> tuple[int, ...]:
    """Statuses that the answer may have."""
    if method is not None and method.needs == "nobody":
        return (401,) if asker.limit == DEAD and name == "docs" else (200,)
    if asker.limit == DEAD or (asker.rank == RANK["nobody"] and ENDPOINTS[name].get("GET") != PUBLIC):
        return (401,)
    if method is None:
        return (405,)
    if method.needs == "person":
        return (403,) if asker.by_token else method.gives
    if method.of_one_project and (asker.rank == RANK["stranger"] or asker.limit == LIMITED):
        return (method.hidden,)
    if method.writes and (asker.limit == READING or (not method.of_one_project and asker.limit)):
        return (403,)
    return method.gives if asker.rank >= RANK[method.needs] else (403,)


def answer(asker: Asker, name: str, verb: str, method: Method | None, keys: Keys) -> HttpResponseBase:
    """What an endpoint answers, and nothing of it remains."""
    keys = {**keys, "token_id": asker.spare_token}
    path = address(name, keys, method.query if method else "")
    body = method.body(keys) if method and method.body else None
    match = {"If-Match": "*"} if method and method.takes_match else {}
    accept = {"Accept": "text/html"} if name == "docs" else {}
    with undone():
        return asker.ask(verb, path, body, **match, **accept)


def test_the_table_knows_every_endpoint_and_no_other() -> None:
    assert [p.name for p in urlpatterns if p.name not in ENDPOINTS] == []
    assert set(ENDPOINTS) - {p.name for p in urlpatterns} == set()
    for pattern in urlpatterns:
        view = pattern.callback.view_class
        there = {verb for verb in METHODS if hasattr(view, verb.lower())}
        assert there == set(ENDPOINTS[pattern.name]), pattern.name


def test_every_endpoint_answers_everybody_as_the_table_says(world: World, elsewhere: Keys) -> None:
    wrong, asked = [], 0
    for asker in askers(world):
        for name, methods in ENDPOINTS.items():
            for verb in METHODS:
                method = methods.get(verb)
                if name == "elsewhere" or (method is None and asker.name not in OTHER_METHODS_BY):
                    continue
                response, asked = answer(asker, name, verb, method, world.keys), asked + 1
                expected = allowed(asker, method, name)
                if response.status_code not in expected:
                    wrong.append(f"{asker.name} {verb} {name}: {response.status_code} instead of {expected}")
                if response.status_code >= 400 and response["Content-Type"] != "application/problem+json":
                    wrong.append(f"{asker.name} {verb} {name}: {response['Content-Type']}")
    assert not wrong, "\n".join(wrong)
    assert asked > 600


def test_heads_and_options_tell_no_more_than_the_rest(world: World, elsewhere: Keys) -> None:
    wrong = []
    for asker in askers(world):
        for name, methods in ENDPOINTS.items():
            if asker.name not in ("nobody", "stranger", "reader") or name == "elsewhere":
                continue
            method = methods.get("GET")
            head = answer(asker, name, "HEAD", method, world.keys)
            if head.status_code not in allowed(asker, method, name):
                wrong.append(f"{asker.name} HEAD {name}: {head.status_code}")
            options = answer(asker, name, "OPTIONS", None, world.keys)
            expected = 200 if methods.get("GET") == PUBLIC or asker.name != "nobody" else 401
            if options.status_code != expected:
                wrong.append(f"{asker.name} OPTIONS {name}: {options.status_code}")
            if any(word in options.content.decode() for word in OURS):
                wrong.append(f"{asker.name} OPTIONS {name} tells of records")
    assert not wrong, "\n".join(wrong)


def test_a_session_writes_nothing_without_the_csrf_token(world: World) -> None:
    client = Client(enforce_csrf_checks=True, raise_request_exception=False)
    client.force_login(world.people["owner"])
    owner, tried = Asker("owner", RANK["owner"], client, spare_token=1), 0
    for name, methods in ENDPOINTS.items():
        for verb, method in methods.items():
            if verb != "GET":
                response, tried = answer(owner, name, verb, method, world.keys), tried + 1
                assert response.status_code == 403, (name, verb)
                assert "CSRF" in response.json()["detail"], (name, verb)
    assert tried > 15


def test_no_address_below_rest_is_anything_but_a_problem(db: None) -> None:
    client = Client(raise_request_exception=False)
    for verb in (*METHODS, "HEAD", "OPTIONS", "TRACE", "NONSENSE"):
        response = client.generic(verb, "/api/v1/nowhere/")
        assert response.status_code == 404 and response["Content-Type"] == "application/problem+json"


def gets(world: World) -> list[str]:
    return [
        name for name, methods in ENDPOINTS.items() if "GET" in methods and name not in ("schema", "docs")
    ]


def confined(world: World) -> list[Asker]:
    """Who sees the other project only: its owner, and the token for it of somebody who sees both."""
    return [
        Asker("stranger", RANK["stranger"], world.client("stranger")),
        by_token(world, "owner", "elsewhere", scope="write", project="elsewhere", limit=LIMITED),
    ]


def test_what_one_project_answers_names_nothing_of_another(world: World, elsewhere: Keys) -> None:
    for asker in confined(world):
        for name in gets(world):
            response = answer(asker, name, "GET", ENDPOINTS[name]["GET"], elsewhere)
            text = b"".join(response).decode() if response.streaming else response.content.decode()
            assert response.status_code == 200, (asker.name, name)
            assert not [word for word in OURS if word in text], (asker.name, name)
    lists = ("projects", "runs")
    owner = Asker("owner", RANK["owner"], world.client("owner"))
    for name in lists:  # so that the words would be found
        text = answer(owner, name, "GET", ENDPOINTS[name]["GET"], elsewhere).content.decode()
        assert re.search("xidation", text) and re.search("elsewhere", text), name


FILTERS = (
    "runs/?project=oxidation", "runs/?compound=alcohol", "runs/?code=K01", "runs/?author=mira&code=K02",
    "runs/?replicate_of=K01", "runs/?T_min=290&T_max=330", "runs/?has=table&compound=ketone",
    "fits/?project=elsewhere&dataset={dataset_id}", "fits/?project=elsewhere&version={version_id}",
    "fits/?project=elsewhere&mechanism=first%20order", "projects/elsewhere/compounds/?name=alcohol",
    "projects/elsewhere/lots/?code=L-alcohol", "projects/elsewhere/stocks/?code=S-alcohol",
    "evidence/?project=elsewhere&mechanism=first%20order", "evidence/?project=elsewhere&q=code%20K01",
)  # fmt: skip


def test_filters_find_nothing_of_another_project(world: World, elsewhere: Keys) -> None:
    for asker in confined(world):
        for path in FILTERS:
            response = asker.ask("GET", f"/api/v1/{path}".format(**world.keys))
            assert response.status_code == 200, (path, response.content)
            assert response.json()["items"] == [], (asker.name, path)


def references(own: Keys, theirs: Keys) -> list[tuple[str, dict[str, Any]]]:
    """Bodies for records of one's own that name records of another project."""
    mixed = {**own, "table_id": theirs["table_id"]}
    run = run_of(own, "S09")
    charge = {"amount": {"value": 1, "unit": "mL"}}
    return [
        ("run-tables", {"signal_table": theirs["signal_table_id"], "name": "n", "recipe": RECIPE}),
        ("supersede-table", {"newer": theirs["newer_table_id"], "reason": "better"}),
        ("datasets", {"project": own["slug"], "name": "n", "tables": [own["table_id"], mixed["table_id"]]}),
        ("fits", fit_of({**own, "version_id": theirs["version_id"]})),
        ("fits", fit_of({**own, "dataset_id": theirs["dataset_id"]})),
        ("simulate", {"version": theirs["version_id"], "constants": {}, "start": {}, "times": [1]}),
        ("runs", {**run, "charges": [{**charge, "stock": "S-alcohol"}]}),
        ("runs", {**run, "charges": [{**charge, "lot": "L-alcohol"}]}),
        ("runs", {**run_of(own, "S09"), "replicate_of": "K01"}),
        ("lots", {"code": "L-9", "compound": "alcohol"}),
    ]


def test_a_body_that_names_a_record_of_another_project_is_told_that_there_is_none(
    world: World, elsewhere: Keys
) -> None:
    """And in the same words as for a number or name that nobody has."""
    nobodys = dict.fromkeys(world.keys, 999999)
    for asker in confined(world):
        pairs = zip(references(elsewhere, world.keys), references(elsewhere, nobodys), strict=True)
        for (name, theirs), (_, none) in pairs:
            told = []
            for body in (theirs, none):
                with undone():
                    response = asker.ask("POST", address(name, elsewhere), body)
                assert response.status_code in (404, 422), (asker.name, name, body, response.content)
                told.append(re.sub(r"\d+", "N", response.content.decode()))
            assert told[0] == told[1], (asker.name, name)
            sent = str(theirs)
            assert not [w for w in OURS if w in told[0] and w not in sent], (asker.name, name)


def test_a_token_of_somebody_else_is_not_withdrawn(db: None) -> None:
    token = make_token(make_user(), "mine")[0]
    response = script_of(make_user()).ask("POST", address("withdraw-token", {"token_id": token.pk}))
    token.refresh_from_db()
    assert response.status_code == 404 and token.withdrawn is None


def test_no_token_is_made_for_a_project_that_one_may_not_see(db: None) -> None:
    make_project(slug="oxidation")
    for slug in ("oxidation", "nobody-s"):
        body = {**token_of(), "project": slug}
        response = script_of(make_user()).ask("POST", "/api/v1/tokens/", body)
        assert response.status_code == 422
        assert f"there is no project '{slug}' that you may see" in response.json()["detail"]


def script_of(user: User) -> Asker:
    client = Client(raise_request_exception=False)
    client.force_login(user)
    return Asker("somebody", RANK["stranger"], client)
