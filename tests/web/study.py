"""A small study for the pages: an alcohol is oxidised to a ketone, A -> B, at two temperatures."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import request_fit
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.models import Project
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run
from tests.factories.flow import compute_now, lines, make_run

TIMES = np.arange(0.0, 1201.0, 100.0)
NOISE = 0.004
RIGHT, WRONG = "alcohol --k_ox--> ketone\n", "2 alcohol --k_2--> 2 ketone\n"


@dataclass
class Study:
    """A project with what was put into it."""

    user: User
    project: Project

    def run(
        self, code: str, *, kelvin: float = 298.15, start: float = 0.1, k: float = 2e-3, **more: object
    ) -> Run:
        """A run whose file is stored and reduced against an internal standard."""
        run = make_run(
            self.user,
            self.project.pk,
            code,
            {"alcohol": Amount(start, "mol/L", 0.01 * start)},
            temperature=Amount(kelvin - 273.15, "degC", 0.2),
            **more,
        )
        self.table(run, start=start, k=k)
        return run

    def table(
        self, run: Run, *, start: float = 0.1, k: float = 2e-3, name: str = "nmr.txt"
    ) -> ConcentrationTable:
        noise = np.random.default_rng([len(run.code), *run.code.encode()]).normal(0.0, NOISE, (2, TIMES.size))
        alcohol = start * np.exp(-k * TIMES) / 0.05 + noise[0]
        ketone = start * (1 - np.exp(-k * TIMES)) / 0.05 + noise[1]
        rows = [
            (t, f"{a:.5f}", f"{b:.5f}", "1.00000") for t, a, b in zip(TIMES, alcohol, ketone, strict=True)
        ]
        text = lines(("time / s", "H1", "H2", "ref"), *rows)
        signals = store_file(user=self.user, run=run, name=name, data=text.encode())
        recipe = {
            "kind": "internal standard",
            "standard": {"signal": "ref", "species": "standard", "nuclei": 1, "noise": 1e-4},
            "standard_concentration": 0.05,
            "standard_owner": "standard",
            "standard_relative_u": 0.002,
            "signals": [
                {"signal": "H1", "species": "alcohol", "nuclei": 1, "noise": NOISE},
                {"signal": "H2", "species": "ketone", "nuclei": 1, "noise": NOISE},
            ],
        }
        return reduce_signals(
            user=self.user, signal_table=signals, name="against the standard", recipe=recipe
        )

    def dataset(self, name: str = "all") -> Dataset:
        tables = ConcentrationTable.objects.filter(run__project=self.project, superseded_by__isnull=True)
        ids = list(tables.order_by("run__code").values_list("pk", flat=True))
        return freeze_dataset(user=self.user, project_id=self.project.pk, name=name, table_ids=ids)

    def version(self, name: str, text: str) -> MechanismVersion:
        return write_version(user=self.user, project_id=self.project.pk, name=name, text=text)

    def fit(
        self, name: str, text: str, dataset: Dataset, *, start: float = 1e-3, compute: bool = True
    ) -> Fit:
        version = self.version(name, text)
        constant = text.split("--")[1]
        fit = request_fit(
            user=self.user,
            dataset=dataset,
            mechanism_version=version,
            constants=[Constant(constant, start=start, scope="in a group", group_by="temperature")],
        )
        if compute:
            compute_now(fit)
        return fit
