"""One small world that all access tests look at: a project with one record of every kind, and people of every role."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from django.db import transaction
from django.http import HttpResponse
from django.test import Client

from kinetics_db.accounts.models import User
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.fits.services import request_fit
from kinetics_db.materials.services import Portion, enter_lot, make_up_stock
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.selectors import project_named
from kinetics_db.projects.services import create_project, set_member
from kinetics_db.runs.entry import Amount
from tests.factories.flow import compute_now, make_reported_table, make_run
from tests.factories.people import make_member, make_user
from tests.factories.small import SIGMA, decay_file
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


OURS = ("alcohol", "ketone", "K01", "K02", "xidation", "first order", "second order", "carl", "rosa", "nmr")
"""Words of the first project, none of which stands in an answer to somebody who may not see it."""


def add_elsewhere(world: World) -> dict[str, object]:
    """Fill the stranger's project, let the owner of the first one see it too, and give its records by name."""
    stella, mira = world.people["stranger"], world.people["owner"]
    project = project_named(user=stella, slug="elsewhere")
    set_member(user=stella, project=project, member=mira, role="contributor")
    where: dict[str, Any] = {"user": stella, "project_id": project.pk}
    run = make_run(stella, project.pk, "S01", {"ester": Amount(10.0, "mM", 0.1)})
    columns = {"A": "ester", "B": "acid"}
    table = make_reported_table(stella, run, decay_file(10.0, 0.01, seed=1), columns, constant_u=SIGMA)
    newer = make_reported_table(stella, run, decay_file(10.0, 0.01, seed=2), columns, constant_u=SIGMA)
    enter_lot(**where, code="L-S", compound="ester")
    make_up_stock(**where, code="S-S", portions=[Portion(1.0, "g", lot="L-S")], volume=(100.0, "mL"))
    dataset = freeze_dataset(**where, name="theirs", table_ids=[table.pk])
    version = write_version(**where, name="hydrolysis", text="ester --k--> acid")
    about: dict[str, Any] = {"user": stella, "dataset": dataset, "mechanism_version": version}
    fit, waiting = (request_fit(**about, constants=[Constant("k", start=s)]) for s in (0.02, 0.03))
    compute_now(fit)
    return {
        "slug": project.slug,
        "username": stella.username,
        "run_id": run.pk,
        "number": 1,
        "form": "csv",
        "file_id": table.signal_table.file_id,
        "signal_table_id": table.signal_table_id,
        "table_id": table.pk,
        "newer_table_id": newer.pk,
        "version_id": version.pk,
        "mechanism_id": version.mechanism_id,
        "dataset_id": dataset.pk,
        "fit_id": fit.pk,
        "open_fit_id": waiting.pk,
    }


@contextmanager
def undone() -> Iterator[None]:
    """Whatever a request writes inside this block is taken back, so that the next one finds the same world."""
    with transaction.atomic():
        yield
        transaction.set_rollback(True)


def leads_to_login(response: HttpResponse) -> bool:
    return response.status_code == 302 and response.headers["Location"].startswith("/login/")
