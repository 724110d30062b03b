"""A project with ten thousand runs and a thousand fits, in which every list has more rows than a page."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import timedelta
from typing import Any, TypeVar

from django.db import connection
from django.db.models import Model
from django.utils import timezone

from kinetics_db.accounts.models import AccessToken, User
from kinetics_db.datasets.models import Dataset, DatasetItem
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.evidence.models import ModelEvidence, RunEvidence
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.models import Job
from kinetics_db.materials.services import Portion, enter_lot, make_up_stock
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.mechanisms.models import Mechanism, MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.models import Membership, Project
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import latest_revisions
from tests.factories.flow import compute_now, make_reported_table, make_run
from tests.factories.many import make_many_runs
from tests.factories.people import make_project, make_user
from tests.factories.small import decay_file
from tests.factories.tokens import make_token

RUNS, TABLES = 10_000, 500
MECHANISMS, VERSIONS, IN_DATASET = 50, 20, 50
IN_FIT = 35
MORE = 60
"""Rows of every other list: more than a page of 50."""

M = TypeVar("M", bound=Model)


@dataclass
class World:
    """The large project, its owner's token, and records by the names that addresses use."""

    owner: User
    project: Project
    secret: str
    keys: dict[str, object] = field(default_factory=dict)


def make_world() -> World:
    """Runs and fits in bulk; one record of each other kind by the services, and many like it."""
    owner = make_user("mira")
    project = make_project(owner, slug="big")
    runs = make_many_runs(owner, project.pk, RUNS, tables=TABLES)
    _make_many_fits(project, runs[:IN_DATASET])
    world = World(owner, project, make_token(owner, scope="write")[1])
    world.keys["slug"] = project.slug
    _make_people_and_projects(world)
    _make_materials(world)
    _make_full_run(world)
    _make_fit(world, runs[:IN_FIT])
    with connection.cursor() as cursor:
        cursor.execute("ANALYZE")
    connection.check_constraints()  # here, once: else the end of each test would check every row again
    return world


def clones(row: M, many: int, /, **changed: Callable[[int], Any]) -> list[M]:
    """Many rows like one, but for what is made from their numbers 2, 3, ..."""
    fields = [f for f in row._meta.concrete_fields if not f.primary_key]
    same = {f.attname: getattr(row, f.attname) for f in fields}
    numbers = range(2, many + 2)
    made = [type(row)(**same | {name: make(i) for name, make in changed.items()}) for i in numbers]
    return type(row)._default_manager.bulk_create(made)


def _make_people_and_projects(world: World) -> None:
    owner, digests = world.owner, itertools.count()
    people = clones(make_user("person"), MORE, username=lambda i: f"person {i:03d}")
    Membership.objects.bulk_create(
        Membership(project=world.project, user=person, role="reader") for person in people
    )
    others = clones(world.project, MORE, slug=lambda i: f"other-{i:03d}", name=lambda i: f"Study {i}")
    Membership.objects.bulk_create(Membership(project=other, user=owner, role="owner") for other in others)
    now = timezone.now()
    AccessToken.objects.bulk_create(
        AccessToken(
            user=owner,
            name=f"token {i:03d}",
            digest=f"{next(digests):064d}",
            start="rw_invented",
            scope="read",
            created=now,
            expires=now + timedelta(days=90),
        )
        for i in range(MORE)
    )


def _make_materials(world: World) -> None:
    """Compounds, lots and stocks, each with one revision, like 'A' and what is made from it."""
    to: dict[str, Any] = {"user": world.owner, "project_id": world.project.pk}
    lot = enter_lot(**to, code="L 1", compound="A", purity=0.98, purity_uncertainty=0.005)
    portions = [Portion(1.0, "g", lot="L 1", uncertainty=0.001), Portion(0.5, "g", compound="B")]
    stock = make_up_stock(**to, code="S 1", volume=(100.0, "mL"), volume_uncertainty=0.1, portions=portions)
    compound = lot.compound_revision
    named = (
        (compound, "compound", "name", "compound"),
        (lot, "lot", "code", "lot"),
        (stock, "stock", "code", "stock"),
    )
    for revision, kind, called, word in named:
        rows = clones(getattr(revision, kind), MORE, **{called: lambda i, word=word: f"{word} {i:03d}"})
        clones(revision, MORE, **{f"{kind}_id": lambda i, rows=rows: rows[i - 2].pk})


def _make_full_run(world: World) -> None:
    """A run with many revisions, files, signal tables and concentration tables."""
    owner = world.owner
    run = make_run(owner, world.project.pk, "FULL", {"A": Amount(10, "mM", 0.1)})
    table = make_reported_table(owner, run, decay_file(10.0, 0.01, seed=1), {"A": "A", "B": "B"})
    revision = run.revisions.get()
    revisions = clones(revision, MORE, number=lambda i: i, digest=lambda i: f"{i:064d}")
    clones(revision.charges.get(), MORE, revision_id=lambda i: revisions[i - 2].pk)
    Run.objects.filter(pk=run.pk).update(latest_number=MORE + 1)
    files = clones(table.signal_table.file, MORE, name=lambda i: f"file {i:03d}.csv")
    signals = clones(table.signal_table, MORE, file_id=lambda i: files[i - 2].pk)
    clones(table, MORE, number=lambda i: i, signal_table_id=lambda i: signals[i - 2].pk)
    world.keys |= {
        "run_id": run.pk,
        "number": 1,
        "file_id": table.signal_table.file_id,
        "signal_table_id": table.signal_table_id,
        "table_id": table.pk,
    }


def _make_fit(world: World, runs: list[Run]) -> None:
    """A dataset of 35 runs with a computed fit, and many datasets and versions like those."""
    to: dict[str, Any] = {"user": world.owner, "project_id": world.project.pk}
    tables = ConcentrationTable.objects.filter(run__in=runs).order_by("run__code")
    ids = list(tables.values_list("pk", flat=True))
    dataset = freeze_dataset(**to, name="computed", table_ids=ids)
    clones(dataset, MORE, number=lambda i: i, digest=lambda i: f"{i:064d}")
    version = write_version(**to, name="decay", text="A --k--> B")
    constant = Constant("k", start=1e-3, scope="in a group", group_by="temperature")
    fit = request_fit(user=world.owner, dataset=dataset, mechanism_version=version, constants=[constant])
    compute_now(fit)
    clones(version, MORE, number=lambda i: i, digest=lambda i: f"{i:064d}")
    ideas = clones(version.mechanism, MORE, name=lambda i: f"idea {i:03d}")
    clones(version, MORE, mechanism_id=lambda i: ideas[i - 2].pk)
    world.keys |= {
        "dataset_id": dataset.pk,
        "mechanism_id": version.mechanism_id,
        "version_id": version.pk,
        "fit_id": fit.pk,
        "position": 1,
        "form": "parquet",
    }


def _make_many_fits(project: Project, runs: list[Run]) -> None:
    """Every mechanism in every version fitted to one dataset, with a verdict on each of its runs."""
    user = project.created_by
    made = {"created_by": user, "canonical": b"{}"}
    (dataset,) = Dataset.objects.bulk_create(
        [Dataset(project=project, name="all", number=1, basis="mol/L", digest="d", **made)]
    )
    tables = list(ConcentrationTable.objects.filter(run__in=runs).order_by("run__code"))
    revisions = latest_revisions([run.pk for run in runs])
    DatasetItem.objects.bulk_create(
        DatasetItem(dataset=dataset, order=i, run_revision=revisions[table.run_id], table=table)
        for i, table in enumerate(tables)
    )
    mechanisms = Mechanism.objects.bulk_create(
        Mechanism(project=project, name=f"mechanism {i:03d}") for i in range(MECHANISMS)
    )
    versions = MechanismVersion.objects.bulk_create(
        MechanismVersion(mechanism=m, number=n, text="A --k--> B", digest=f"{m.pk}-{n}", **made)
        for n in range(1, VERSIONS + 1)
        for m in mechanisms
    )
    fits = Fit.objects.bulk_create(
        Fit(
            project=project, dataset=dataset, mechanism_version=v, engine_version="0", digest=v.digest, **made
        )
        for v in versions
    )
    now = timezone.now()
    Job.objects.bulk_create(
        Job(kind="fit", subject_id=fit.pk, state="done", requested_by=user, finished=now) for fit in fits
    )
    results = FitResult.objects.bulk_create(
        FitResult(fit=fit, attempt=1, status="converged", cost=1.0, seconds=1.0, digest=fit.digest, **made)
        for fit in fits
    )
    evidence = ModelEvidence.objects.bulk_create(
        ModelEvidence(result=r, aicc=float(i), bic=0.0, data_key="k", digest=r.digest, **made)
        for i, r in enumerate(results)
    )
    _judge_every_run(evidence, dataset)


def _judge_every_run(evidence: list[ModelEvidence], dataset: Dataset) -> None:
    """Fifty thousand verdicts, which the database itself makes in a moment."""
    verdicts, items = RunEvidence._meta.db_table, DatasetItem._meta.db_table
    with connection.cursor() as cursor:
        cursor.execute(
            f"INSERT INTO {verdicts} (evidence_id, run_revision_id, table_id, verdict, observable, pull_name) "
            f"SELECT e.id, i.run_revision_id, i.table_id, 'agrees', 'A', '' "
            f"FROM unnest(%s::bigint[]) AS e(id) CROSS JOIN {items} i WHERE i.dataset_id = %s",
            [[row.pk for row in evidence], dataset.pk],
        )
