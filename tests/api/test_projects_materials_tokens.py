"""Projects, members, materials and tokens over REST."""

from __future__ import annotations

from typing import Any

import pytest
from django.test import Client

from kinetics_db.accounts.models import AccessToken
from tests.api.conftest import Lab, Script, problem
from tests.factories.people import make_member, make_user


def test_whoever_begins_a_project_owns_it(lab: Lab) -> None:
    new = {"slug": "new-one", "name": "A new one", "description": "two\nlines"}
    response = lab.script.post("projects/", new)
    assert response.status_code == 201 and response["Location"] == "/api/v1/projects/new-one/"
    body = lab.script.get("projects/new-one/").json()
    assert body == response.json() and body["role"] == "owner" and body["created_by"] == "mira"
    assert {name: body[name] for name in new} == new
    problem(lab.script.post("projects/", new), 409)


def test_the_role_shown_is_what_the_token_lets_one_do(lab: Lab) -> None:
    reading = lab.script_of(lab.owner, "reading")
    assert reading.get("projects/hydrolysis/").json()["role"] == "reader"
    assert reading.get("projects/").json()["items"][0]["role"] == "reader"
    contributor = lab.script_of(make_member(lab.project, "contributor"), scope="write")
    assert contributor.get("projects/").json()["items"][0]["role"] == "contributor"


def test_an_owner_gives_roles(lab: Lab) -> None:
    make_user("jonas")
    path = "projects/hydrolysis/members/"
    assert lab.script.ask("PUT", f"{path}jonas/", {"role": "reader"}).json() == {
        "user": "jonas",
        "role": "reader",
    }
    assert lab.script.get(path).json()["items"] == [
        {"user": "jonas", "role": "reader"},
        {"user": "mira", "role": "owner"},
    ]
    unknown = problem(lab.script.ask("PUT", f"{path}nobody/", {"role": "reader"}), 422)["problems"][0]
    assert unknown["field"] == "username"
    problem(lab.script.ask("PUT", f"{path}mira/", {"role": "reader"}), 409)
    wrong = problem(lab.script.ask("PUT", f"{path}jonas/", {"role": "king"}), 422)["problems"][0]
    assert wrong["field"] == "role" and "owner" in wrong["cure"]


def test_an_owner_takes_roles_away_but_not_the_last_owners(lab: Lab) -> None:
    make_member(lab.project, "contributor", "jonas")
    path = "projects/hydrolysis/members/"
    response = lab.script.ask("DELETE", f"{path}jonas/")
    assert response.status_code == 204 and response.content == b""
    assert [m["user"] for m in lab.script.get(path).json()["items"]] == ["mira"]
    problem(lab.script.ask("DELETE", f"{path}jonas/"), 422)
    problem(lab.script.ask("DELETE", f"{path}mira/"), 409)


def test_only_owners_learn_who_has_an_account(lab: Lab) -> None:
    make_user("jonas")
    contributor = lab.script_of(make_member(lab.project, "contributor"), scope="write")
    for name in ("jonas", "nobody"):
        path = f"projects/hydrolysis/members/{name}/"
        problem(contributor.ask("PUT", path, {"role": "reader"}), 403)
        problem(contributor.ask("DELETE", path), 403)


def enter(lab: Lab, kind: str, body: dict[str, Any]) -> dict[str, Any]:
    response = lab.script.post(f"projects/hydrolysis/{kind}/", body)
    assert response.status_code == 201, response.content
    (same,) = lab.script.get(response["Location"].removeprefix("/api/v1/")).json()["items"]
    assert same == response.json()
    return dict(same)


def test_a_compound_is_entered_and_entered_again(lab: Lab) -> None:
    body = {
        "name": "acetic acid / 99 %", "formula": "C2H4O2", "molar_mass": 60.05,
        "density": {"value": 1.05, "unit": "g/mL"}, "hazard_statements": ["H226", "H314"],
    }  # fmt: skip
    first = enter(lab, "compounds", body)
    assert first["density"] == pytest.approx({"value": 1050.0, "unit": "g/L"}) and first["revision"] == 1
    assert {n: first[n] for n in ("name", "formula", "molar_mass", "hazard_statements")} == {
        n: body[n] for n in ("name", "formula", "molar_mass", "hazard_statements")
    }
    assert enter(lab, "compounds", body)["revision"] == 1
    again = enter(lab, "compounds", {**body, "molar_mass": 60.052, "reason": "from the bottle"})
    assert (again["revision"], again["reason"]) == (2, "from the bottle")
    names = [c["name"] for c in lab.script.get("projects/hydrolysis/compounds/").json()["items"]]
    assert names == ["acetic acid / 99 %", "ester"]


def test_a_lot_and_a_stock_of_it(lab: Lab) -> None:
    lot = enter(
        lab, "lots", {"code": "L-1", "compound": "ester", "purity": 0.98, "purity_uncertainty": 0.005}
    )
    assert (lot["compound"], lot["purity"], lot["purity_uncertainty"]) == ("ester", 0.98, 0.005)
    stock = enter(
        lab,
        "stocks",
        {
            "code": "S-1",
            "portions": [{"lot": "L-1", "amount": {"value": 0.88, "unit": "g", "uncertainty": 0.001}}],
            "volume": {"value": 100, "unit": "mL", "uncertainty": 0.1},
            "temperature": {"value": 20, "unit": "degC"},
            "made_on": "2026-03-02",
        },
    )
    (component,) = stock["components"]
    assert component["compound"] == "ester"
    assert component["concentration"]["value"] == pytest.approx(0.98 * 0.01 / 0.1)
    relative = component["concentration"]["uncertainty"] / component["concentration"]["value"]
    assert relative == pytest.approx(((0.005 / 0.98) ** 2 + (0.001 / 0.88) ** 2 + 0.001**2) ** 0.5)
    assert stock["volume"] == pytest.approx({"value": 0.1, "unit": "L", "uncertainty": 1e-4})
    assert stock["temperature"] == {"value": 293.15, "unit": "K"}


@pytest.mark.parametrize(
    ("kind", "body", "field"),
    [
        ("compounds", {}, "name"),
        ("compounds", {"name": "x", "molar_mass": "heavy"}, "molar_mass"),
        ("compounds", {"name": "x", "molar_mass": -1}, "molar_mass"),
        ("compounds", {"name": "x", "density": 1.05}, "density"),
        ("compounds", {"name": "x", "density": {"value": 1}}, "density.unit"),
        ("compounds", {"name": "x", "density": {"value": 1, "unit": "g/mL", "of": "x"}}, "density.of"),
        ("compounds", {"name": "x", "hazard_statements": ["H1", 2]}, "hazard_statements.2"),
        ("compounds", {"name": "x", "hazard_statements": "H1"}, "hazard_statements"),
        ("lots", {"code": "L", "compound": "nobody"}, "compound"),
        ("lots", {"code": "L", "compound": "ester", "purity": True}, "purity"),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "L"}}, "portions"),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "L"}, "portions": [3]}, "portions.1"),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "L"}, "portions": [{"lot": "L"}]},
         "portions.1.amount"),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "L"},
                    "portions": [{"lot": "L", "amount": {"value": 1, "unit": "g"}}]}, "portions.1.lot"),
    ],
)  # fmt: skip
def test_a_material_that_cannot_be_is_refused_with_the_field(
    lab: Lab, kind: str, body: dict[str, Any], field: str
) -> None:
    problems = problem(lab.script.post(f"projects/hydrolysis/{kind}/", body), 422)["problems"]
    assert [p["field"] for p in problems] == [field]
    assert len(lab.script.get(f"projects/hydrolysis/{kind}/").json()["items"]) == (kind == "compounds")


@pytest.mark.parametrize(
    ("kind", "body"),
    [
        ("compounds", {"name": "x", "density": {"value": 1, "unit": "K"}}),
        ("lots", {"code": "L", "compound": "ester", "purity": 7}),
        ("stocks", {"code": "S", "volume": {"value": -1, "unit": "L"},
                    "portions": [{"compound": "ester", "amount": {"value": 1, "unit": "g"}}]}),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "s"},
                    "portions": [{"compound": "ester", "amount": {"value": 1, "unit": "g"}}]}),
        ("stocks", {"code": "S", "volume": {"value": 1, "unit": "L"}, "temperature": {"value": 1, "unit": "g"},
                    "portions": [{"compound": "ester", "amount": {"value": 1, "unit": "g"}}]}),
    ],
)  # fmt: skip
def test_numbers_and_units_that_cannot_be_are_refused_in_words(
    lab: Lab, kind: str, body: dict[str, Any]
) -> None:
    assert problem(lab.script.post(f"projects/hydrolysis/{kind}/", body), 422)["problems"][0]["message"]


def signed_in(lab: Lab) -> Script:
    client = Client()
    client.force_login(lab.owner)
    return Script(client=client)


def test_a_person_makes_a_token_uses_it_and_withdraws_it(lab: Lab) -> None:
    person = signed_in(lab)
    wanted = {"name": "fits", "scope": "read", "expires": "2027-01-01T00:00:00Z", "project": "hydrolysis"}
    response = person.post("tokens/", wanted)
    body = response.json()
    assert response.status_code == 201 and response["Cache-Control"] == "no-store"
    assert body["secret"].startswith(body["begins_with"]) and body["project"] == "hydrolysis"
    script = Script(body["secret"])
    assert script.get("projects/").status_code == 200
    shown = person.get("tokens/").json()["items"]
    assert [t["name"] for t in shown] == ["fits", "notebook"]
    assert all("secret" not in t for t in shown) and body["secret"] not in str(shown)
    assert [t["name"] for t in script.get("tokens/").json()["items"]] == ["fits"]
    assert person.post(f"tokens/{body['id']}/withdraw/").json()["withdrawn"] is not None
    problem(script.get("projects/"), 401)
    problem(person.post(f"tokens/{body['id']}/withdraw/"), 409)


def test_tokens_of_others_are_not_there(lab: Lab) -> None:
    token = AccessToken.objects.get()
    other = Client()
    other.force_login(make_user())
    problem(Script(client=other).post(f"tokens/{token.pk}/withdraw/"), 404)
    assert Script(client=other).get("tokens/").json() == {"items": []}


@pytest.mark.parametrize(
    ("change", "field"),
    [({"expires": "soon"}, "expires"), ({"expires": "2027-01-01"}, "expires"), ({"expires": None}, "expires"),
     ({"expires": "2020-01-01T00:00:00Z"}, "expires"), ({"expires": "9999-12-31T23:59:59+00:00"}, "expires"),
     ({"scope": "all"}, "scope"), ({"project": "nowhere"}, "project"), ({"name": ""}, "name"),
     ({"name": "notebook"}, "name"), ({"days": 3}, "days")],
)  # fmt: skip
def test_a_token_that_cannot_be_is_refused_with_the_field(
    lab: Lab, change: dict[str, Any], field: str
) -> None:
    wanted = {"name": "fits", "scope": "read", "expires": "2027-01-01T00:00:00Z", **change}
    (found,) = problem(signed_in(lab).post("tokens/", wanted), 422)["problems"]
    assert found["field"] == field
