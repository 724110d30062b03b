"""What every test of the pages has at hand."""

from __future__ import annotations

import math

import pytest
from django.core.cache import cache
from django.test import Client

from kinetics_db.projects.services import create_project
from tests.factories.people import make_user
from tests.web.study import RIGHT, WRONG, Study


@pytest.fixture(autouse=True)
def _no_counted_logins() -> None:
    cache.clear()


@pytest.fixture
def study(db: None) -> Study:
    """An empty project and its owner."""
    user = make_user("mira")
    project = create_project(user=user, slug="oxidation", name="Oxidation of an alcohol")
    return Study(user, project)


@pytest.fixture
def fitted(study: Study) -> Study:
    """Two runs at two temperatures under two rival models."""
    study.run("K01")
    study.run("K02", kelvin=308.15, k=2e-3 * math.exp(0.7), control_kind="blank", notes="stirred <fast>")
    dataset = study.dataset()
    study.fit("first order", RIGHT, dataset)
    study.fit("second order", WRONG, dataset, start=1e-2)
    return study


@pytest.fixture
def browser(study: Study, client: Client) -> Client:
    """The owner, logged in."""
    client.force_login(study.user)
    return client
