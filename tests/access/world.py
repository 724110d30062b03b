"""One small world that all access tests look at: a project with one record of every kind, and people of every role."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

from django.db import transaction
from django.http import HttpResponse
from django.test import Client

from kinetics_db.accounts.models import User
from kinetics_db.projects.services import create_project
from tests.factories.people import make_member, make_user
from tests.web.study import RIGHT, WRONG, Study

ROLES = ("nobody", "stranger", "reader", "contributor", "owner")
"""A stranger is the owner of another project; nobody is not logged in."""
RANK = {role: rank for rank, role in enumerate(ROLES)}


@dataclass
class World:
    """Records by the names that addresses use, and people by role."""

    study: Study
    people: dict[str, User]
    keys: dict[str, object] = field(default_factory=dict)

    def client(self, role: str) -> Client:
        client = Client(raise_request_exception=False)
        if role != "nobody":
            client.force_login(self.people[role])
        return client


def make_world() -> World:
    """Two runs with tables, a dataset, a computed fit, one that waits, in a project of 'mira'."""
    owner = make_user("mira")
    project = create_project(user=owner, slug="oxidation", name="Oxidation of an alcohol")
    study = Study(owner, project)
    run = study.run("K01")
    study.run("K02", kelvin=308.15)
    again = study.table(run, name="nmr-again.txt")
    older = run.concentration_tables.order_by("number").first()
    dataset = study.dataset()
    fit = study.fit("first order", RIGHT, dataset)
    waiting = study.fit("second order", WRONG, dataset, start=1e-2, compute=False)
    people = {
        "owner": owner,
        "contributor": make_member(project, "contributor", "carl"),
        "reader": make_member(project, "reader", "rosa"),
        "stranger": make_user("stella"),
    }
    create_project(user=people["stranger"], slug="elsewhere", name="Another project")
    keys = {
        "slug": project.slug,
        "run_id": run.pk,
        "file_id": older.signal_table.file_id,
        "signal_table_id": older.signal_table_id,
        "table_id": older.pk,
        "newer_table_id": again.pk,
        "version_id": fit.mechanism_version_id,
        "mechanism_id": fit.mechanism_version.mechanism_id,
        "dataset_id": dataset.pk,
        "fit_id": fit.pk,
        "open_fit_id": waiting.pk,
        "position": 1,
    }
    return World(study, people, keys)


@contextmanager
def undone() -> Iterator[None]:
    """Whatever a request writes inside this block is taken back, so that the next one finds the same world."""
    with transaction.atomic():
        yield
        transaction.set_rollback(True)


def leads_to_login(response: HttpResponse) -> bool:
    return response.status_code == 302 and response.headers["Location"].startswith("/login/")
