"""Who may ask: tokens, sessions with their CSRF check, and nobody else."""

from __future__ import annotations

from datetime import timedelta

import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from kinetics_db.accounts.models import AccessToken
from kinetics_db.projects.access import withdraw_access_token
from kinetics_db.projects.models import Project
from tests.api.conftest import Lab, Script, problem
from tests.factories.people import make_member, make_project
from tests.factories.tokens import make_token

PASSWORD = "a long password 1"


def test_a_stranger_is_asked_for_a_token(lab: Lab) -> None:
    response = Script().get("projects/")
    problem(response, 401)
    assert response["WWW-Authenticate"].startswith("Bearer")
    assert response["Cache-Control"] == "no-store"


@pytest.mark.parametrize("secret", ["rw_unknown", "", "x" * 100_000, "Ärger", "two words"])
def test_an_unknown_token_is_refused(lab: Lab, secret: str) -> None:
    response = Script().get("projects/", Authorization=f"Bearer {secret}")
    assert "no such access token" in problem(response, 401)["detail"]


def test_another_scheme_is_left_to_whoever_stands_in_front(lab: Lab) -> None:
    problem(Script().get("projects/", Authorization="Basic bWlyYTp4"), 401)
    client = Client()
    client.force_login(lab.owner)
    assert Script(client=client).get("projects/", Authorization="Basic bWlyYTp4").status_code == 200


def test_an_expired_token_says_when_it_expired(lab: Lab) -> None:
    long_ago = timezone.now() - timedelta(days=9)
    AccessToken.objects.update(created=long_ago - timedelta(days=1), expires=long_ago)
    assert f"expired on {long_ago:%Y-%m-%d}" in problem(lab.script.get("projects/"), 401)["detail"]


def test_a_withdrawn_token_says_so(lab: Lab) -> None:
    withdraw_access_token(user=lab.owner, token_id=AccessToken.objects.get().pk)
    assert "withdrawn on" in problem(lab.script.get("projects/"), 401)["detail"]


def test_a_token_of_a_switched_off_account_is_refused(lab: Lab) -> None:
    lab.owner.is_active = False
    lab.owner.save()
    assert "switched off" in problem(lab.script.get("projects/"), 401)["detail"]


def test_the_last_use_of_a_token_is_shown(lab: Lab) -> None:
    assert AccessToken.objects.get().last_used is None
    lab.script.get("projects/")
    assert lab.script.get("tokens/").json()["items"][0]["last_used"] is not None


def test_a_session_may_read_and_needs_the_csrf_token_to_write(lab: Lab) -> None:
    client = Client(enforce_csrf_checks=True)
    client.force_login(lab.owner)
    script, new = Script(client=client), {"slug": "another", "name": "Another"}
    assert script.get("projects/").status_code == 200
    assert "CSRF" in problem(script.post("projects/", new), 403)["detail"]
    client.cookies["csrftoken"] = "a" * 32
    assert script.post("projects/", new, X_CSRFToken="a" * 32).status_code == 201


def test_a_token_needs_no_csrf_token(lab: Lab) -> None:
    script = Script(lab.script.secret, Client(enforce_csrf_checks=True))
    assert script.post("projects/", {"slug": "another", "name": "Another"}).status_code == 201


WRITES = [
    ("POST", "projects/", {"slug": "another", "name": "Another"}),
    ("PUT", "projects/hydrolysis/members/mira/", {"role": "owner"}),
    ("DELETE", "projects/hydrolysis/members/mira/", None),
    ("POST", "projects/hydrolysis/compounds/", {"name": "acid"}),
    ("POST", "projects/hydrolysis/lots/", {"code": "L-1", "compound": "ester"}),
    (
        "POST",
        "projects/hydrolysis/stocks/",
        {
            "code": "S-1",
            "volume": {"value": 1, "unit": "L"},
            "portions": [{"compound": "ester", "amount": {"value": 1, "unit": "g"}}],
        },
    ),
    ("POST", "runs/", {"project": "hydrolysis", "code": "K02", "charges": [
        {"compound": "ester", "amount": {"value": 1, "unit": "mM"}}]}),
    ("PATCH", "runs/{run}/", {"notes": "changed"}),
    ("POST", "runs/{run}/seal/", None),
    ("POST", "tokens/", {"name": "more", "scope": "read", "expires": "2027-01-01T00:00:00Z"}),
    ("POST", "tokens/{token}/withdraw/", None),
]  # fmt: skip


@pytest.mark.parametrize(("method", "path", "body"), WRITES, ids=lambda v: v if isinstance(v, str) else "")
def test_a_reading_token_writes_nowhere(lab: Lab, method: str, path: str, body: object) -> None:
    run = lab.logged()
    reading = lab.script_of(lab.owner, "reading")
    path = path.format(run=run["id"], token=AccessToken.objects.get(name="reading").pk)
    before = connection_rows()
    problem(reading.ask(method, path, body, If_Match="*"), 403)
    assert connection_rows() == before


def connection_rows() -> dict[str, int]:
    """Rows in each table of ours."""
    with connection.cursor() as cursor:
        tables = [name for name in connection.introspection.table_names(cursor) if "session" not in name]
        counts = {}
        for name in tables:
            cursor.execute(f"SELECT COUNT(*) FROM {connection.ops.quote_name(name)}")
            counts[name] = cursor.fetchone()[0]
    return counts


def test_a_token_for_one_project_finds_no_other(lab: Lab) -> None:
    other = make_project(lab.owner, "other-one")
    here = lab.logged()
    there = Lab(other, lab.owner, lab.script)
    lab.script.post("projects/other-one/compounds/", {"name": "ester"})
    hidden = there.logged("H01")
    one = lab.script_of(lab.owner, "one", scope="write", project="hydrolysis")
    assert [p["slug"] for p in one.get("projects/").json()["items"]] == ["hydrolysis"]
    assert [r["id"] for r in one.get("runs/").json()["items"]] == [here["id"]]
    assert one.get("runs/?project=other-one").json()["items"] == []
    for path in ("projects/other-one/", "projects/other-one/members/", "projects/other-one/compounds/",
                 "projects/other-one/lots/", "projects/other-one/stocks/", f"runs/{hidden['id']}/",
                 f"runs/{hidden['id']}/revisions/", f"runs/{hidden['id']}/revisions/1/"):  # fmt: skip
        problem(one.get(path), 404)
    problem(one.post("runs/", there.entry("H02")), 404)
    problem(one.post(f"runs/{hidden['id']}/seal/"), 404)
    problem(one.ask("PATCH", f"runs/{hidden['id']}/", {"notes": "x"}, If_Match="*"), 404)
    problem(one.post("projects/", {"slug": "third", "name": "Third"}), 403)
    assert one.post("runs/", lab.entry("K02")).status_code == 201


def test_a_stranger_to_a_project_learns_nothing_of_it(lab: Lab) -> None:
    run = lab.logged()
    stranger = lab.script_of(make_project().created_by, scope="write")
    assert stranger.get("runs/").json() == {"items": []}
    for path in ("projects/hydrolysis/", f"runs/{run['id']}/", "projects/hydrolysis/compounds/"):
        there, nowhere = stranger.get(path), stranger.get(path.replace("hydrolysis", "x").replace("/1", "/9"))
        assert problem(there, 404).keys() == problem(nowhere, 404).keys()


@pytest.mark.parametrize("path", ["projects/", "runs/", "tokens/", "projects/hydrolysis/members/",
                                  "projects/hydrolysis/compounds/", "projects/hydrolysis/lots/",
                                  "projects/hydrolysis/stocks/", "runs/{run}/revisions/"])  # fmt: skip
def test_every_list_takes_five_queries_at_most(lab: Lab, path: str) -> None:
    for number in range(4):
        run = lab.logged(f"K0{number}")
        make_member(lab.project, "reader")
        make_token(lab.owner, f"t{number}", project="hydrolysis")
    lab.script.get("projects/")  # the last use of the token is noted
    with CaptureQueriesContext(
        connection,
    ) as queries:
        response = lab.script.get(path.format(run=run["id"]))
    assert response.status_code == 200 and response.json()["items"] is not None
    assert len(queries) <= 5, [q["sql"][:200] for q in queries]


def test_a_project_that_is_gone_for_its_person_is_not_named(lab: Lab) -> None:
    member = make_member(lab.project, "reader")
    script = lab.script_of(member, project="hydrolysis")
    Project.objects.get().memberships.filter(user=member).delete()
    assert script.get("tokens/").json()["items"][0]["project"] == "not yours any more"
    assert script.get("projects/").json()["items"] == []
