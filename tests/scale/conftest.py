"""The large world: made once for all tests of a file, and taken back at their end."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import pytest
from django.db import transaction
from django.test import Client

from kinetics_db.provenance.remembered import Remembered
from tests.scale.world import World, make_world


@pytest.fixture(scope="module")
def world(django_db_setup: None, django_db_blocker: Any) -> Iterator[World]:
    """Each test's own changes are undone by its own transaction, inside the one that holds the world."""
    with django_db_blocker.unblock(), transaction.atomic():
        yield make_world()
        transaction.set_rollback(True)


@pytest.fixture
def nothing_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    """Lists that are made anew for every request, as after each write."""
    for place in ("kinetics_db.web.views.runs.LISTS", "api.runs.LISTS"):
        monkeypatch.setattr(place, Remembered(0))


@pytest.fixture
def browser(world: World, db: None) -> Client:
    """The owner, logged in."""
    client = Client()
    client.force_login(world.owner)
    return client


@pytest.fixture
def script(world: World, db: None) -> Client:
    """The owner's script."""
    return Client(headers={"authorization": f"Bearer {world.secret}"})
