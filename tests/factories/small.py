"""A small invented study: A --k--> B in a few runs, computed from the closed form with stated noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount
from tests.factories.flow import lines, make_reported_table, make_run
from tests.factories.people import make_project

SIGMA = 0.05  # mmol/L


@dataclass(frozen=True)
class SmallStudy:
    project: Project
    user: User
    tables: list[ConcentrationTable]
    dataset: Dataset
    version: MechanismVersion


def decay_file(start: float, k: float, *, seed: int, points: int = 12) -> str:
    """A and B of A --k--> B in mmol/L, k in 1/s, with normal noise of SIGMA."""
    t = np.linspace(0.0, 3.0 / k, points)
    noise = np.random.default_rng(seed).normal(0.0, SIGMA, (2, points))
    a = start * np.exp(-k * t)
    return lines(
        ["t / s", "A / mM", "B / mM"],
        *zip(t.tolist(), (a + noise[0]).tolist(), (start - a + noise[1]).tolist(), strict=True),
    )


def make_study(
    *, starts: tuple[float, ...] = (10.0, 20.0), k: tuple[float, ...] | float = 0.01, text: str = "A --k--> B"
) -> SmallStudy:
    """Runs R-1, R-2, ... with [A]0 = starts in mmol/L and k in 1/s (one for all, or one for each)."""
    project = make_project()
    user = project.created_by
    rates = k if isinstance(k, tuple) else (k,) * len(starts)
    tables = []
    for i, (start, rate) in enumerate(zip(starts, rates, strict=True), start=1):
        run = make_run(
            user,
            project.pk,
            f"R-{i}",
            {"A": Amount(start, "mM", 0.01 * start)},
            temperature=Amount(20 + 10 * i, "degC"),
        )
        tables.append(
            make_reported_table(
                user,
                run,
                decay_file(start, rate, seed=i),
                {"A": "A", "B": "B"},
                name=f"R-{i}.csv",
                constant_u=SIGMA,
            )
        )
    dataset = freeze_dataset(user=user, project_id=project.pk, name="all", table_ids=[t.pk for t in tables])
    version = write_version(user=user, project_id=project.pk, name="decay", text=text)
    return SmallStudy(project, user, tables, dataset, version)
