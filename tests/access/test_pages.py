"""Every page and every role: exactly who may see and do what."""

from __future__ import annotations

import re

import pytest
from django.test import Client
from django.urls import URLPattern, reverse

from kinetics_db.web.urls import urlpatterns
from tests.access.world import RANK, ROLES, World, leads_to_login, make_world, undone
from tests.factories.tokens import make_token

# The answers do not hang on the database; the second pass on SQLite need not repeat them.
pytestmark = pytest.mark.postgresql

#: Page -> (role that may read it, role that may send it). None: the page has no such method.
#: 'nobody' is everyone, 'stranger' everyone who is logged in.
PAGES: dict[str, tuple[str | None, str | None]] = {
    "login": ("nobody", "nobody"),
    "logout": (None, "nobody"),
    "home": ("stranger", None),
    "search": ("stranger", None),
    "new-project": ("stranger", "stranger"),
    "account": ("stranger", "stranger"),
    "tokens": ("stranger", "stranger"),
    "withdraw-token": (None, "owner of the token"),
    "project": ("reader", None),
    "under-way": ("reader", None),
    "members": ("reader", "owner"),
    "materials": ("reader", None),
    "new-compound": ("contributor", "contributor"),
    "new-lot": ("contributor", "contributor"),
    "new-stock": ("contributor", "contributor"),
    "runs": ("reader", None),
    "runs-csv": ("reader", None),
    "new-run": ("contributor", "contributor"),
    "run-amounts": (None, "contributor"),
    "run": ("reader", None),
    "revise-run": ("contributor", "contributor"),
    "seal-run": (None, "contributor"),
    "new-file": ("contributor", "contributor"),
    "file": ("reader", None),
    "signals": ("reader", None),
    "signals-csv": ("reader", None),
    "reduce": ("contributor", "contributor"),
    "table": ("reader", None),
    "table-csv": ("reader", None),
    "supersede-table": ("contributor", "contributor"),
    "mechanisms": ("reader", None),
    "new-mechanism": ("contributor", "contributor"),
    "check-mechanism": (None, "contributor"),
    "version": ("reader", None),
    "datasets": ("reader", None),
    "new-dataset": ("contributor", "contributor"),
    "dataset": ("reader", None),
    "dataset-csv": ("reader", None),
    "fits": ("reader", None),
    "new-fit": ("contributor", "contributor"),
    "fit": ("reader", None),
    "fit-progress": ("reader", None),
    "fit-residuals-csv": ("reader", None),
    "fit-run": ("reader", None),
    "fit-constants-csv": ("reader", None),
    "stop-fit": (None, "contributor"),
    "retry-fit": (None, "contributor"),
    "evidence": ("reader", None),
    "evidence-csv": ("reader", None),
}
OWN_TESTS = {"withdraw-token", "logout"}
"""A token belongs to one person, not to a project (tests/web/test_tokens.py); logging out ends the session."""


@pytest.fixture
def world(db: None) -> World:
    return make_world()


def address(world: World, pattern: URLPattern) -> str:
    needed = pattern.pattern.converters
    return reverse(f"web:{pattern.name}", kwargs={name: world.keys[name] for name in needed})


def patterns() -> list[URLPattern]:
    return [p for p in urlpatterns if p.name not in OWN_TESTS]


def test_the_table_knows_every_page_and_no_other() -> None:
    assert {p.name for p in urlpatterns} == set(PAGES)


def test_every_page_answers_every_role_as_the_table_says(world: World) -> None:
    wrong = []
    for role in ROLES:
        client = world.client(role)
        for pattern in patterns():
            for method, needed in zip(("get", "post"), PAGES[pattern.name], strict=True):
                told = complaint(client, world, role, pattern, method, needed)
                if told:
                    wrong.append(f"{role} {method} {pattern.name}: {told}")
    assert not wrong, "\n".join(wrong)


def complaint(
    client: Client, world: World, role: str, pattern: URLPattern, method: str, needed: str | None
) -> str:
    """What is wrong with the answer, '' when it is as it should be."""
    with undone():
        response = getattr(client, method)(address(world, pattern))
    status = response.status_code
    if status >= 500:
        return f"{status}"
    if role == "nobody" and needed != "nobody":
        return "" if leads_to_login(response) else f"{status} instead of the login"
    if needed is None:
        return "" if status == 405 else f"{status} instead of 405"
    if RANK[role] >= RANK[needed]:
        return (
            "" if status not in (403, 404, 405) and not leads_to_login(response) else f"{status}, but allowed"
        )
    expected = 404 if role == "stranger" else 403
    return "" if status == expected else f"{status} instead of {expected}"


def test_a_token_opens_no_page(world: World) -> None:
    """Tokens are for scripts; a page needs the login."""
    client = Client(
        headers={"authorization": f"Bearer {make_token(world.people['owner'], scope='write')[1]}"}
    )
    for pattern in patterns():
        if PAGES[pattern.name][0] not in (None, "nobody"):
            assert leads_to_login(client.get(address(world, pattern))), pattern.name


def test_lists_name_nothing_of_projects_that_one_may_not_see(world: World) -> None:
    client = world.client("stranger")
    for name in ("home", "search"):
        html = client.get(reverse(f"web:{name}"), {"q": "K01"}).content.decode()
        assert "oxidation" not in html.lower()
        assert "K02" not in html
        assert not re.search(r"/runs/\d", html)
