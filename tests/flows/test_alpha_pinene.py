"""Published measurements through file, table, services and a real worker.

Thermal isomerisation of alpha-pinene: data of Fuguitt & Hawkins (1947) as treated by G. E. P. Box, W. G. Hunter,
J. F. MacGregor, J. Erjavec, Technometrics 15 (1973) 33. Unweighted least squares over all five responses.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import pytest

from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant, Settings
from kinetics_db.evidence.selectors import evidence_of, grid_of
from kinetics_db.fits.models import Fit
from kinetics_db.fits.selectors import result_of
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs.models import Job
from kinetics_db.mechanisms.services import write_version
from kinetics_db.provenance.selectors import chain_breaks, lineage
from kinetics_db.runs.entry import Amount
from tests.factories.flow import make_reported_table, make_run
from tests.factories.people import make_project

FILE = """# thermal isomerisation, per cent of the charge
time / min,alpha-pinene / %,dipentene / %,alloocimene / %,pyronene / %,dimer / %
1230,88.35,7.3,2.3,0.4,1.75
3060,76.4,15.6,4.5,0.7,2.8
4920,65.1,23.1,5.3,1.1,5.8
7800,50.4,32.9,6.0,1.5,9.3
10680,37.5,42.7,6.0,1.9,12.0
15030,25.9,49.1,5.9,2.2,17.0
22620,14.0,57.4,5.1,2.6,21.0
36420,4.5,63.1,3.8,2.9,25.7
"""
TEXT = """
"alpha-pinene" --k_1--> dipentene
"alpha-pinene" --k_2--> alloocimene
alloocimene --k_3--> pyronene
alloocimene <--k_4 / k_5--> dimer
"""
# 1e-5 per minute; sum of squares 19.872 (Box et al. 1973; Dolan, Moré & Munson 2004, 19.872)
PUBLISHED = {"k_1": 5.926, "k_2": 2.963, "k_3": 2.047, "k_4": 27.45, "k_5": 3.998}
NAMES = ("alpha-pinene", "dipentene", "alloocimene", "pyronene", "dimer")


def ask(*, starts: int = 1) -> Fit:
    project = make_project()
    user = project.created_by
    run = make_run(user, project.pk, "1947", {"alpha-pinene": Amount(100.0, "%")})
    table = make_reported_table(user, run, FILE, {name: name for name in NAMES})
    dataset = freeze_dataset(user=user, project_id=project.pk, name="published", table_ids=[table.pk])
    version = write_version(user=user, project_id=project.pk, name="isomerisation", text=TEXT)
    return request_fit(
        user=user,
        dataset=dataset,
        mechanism_version=version,
        constants=[Constant(name, start=1e-6) for name in PUBLISHED],
        settings=Settings(error_model="one sigma", starts=starts),
    )


def wait_for(fit: Fit, *, seconds: float = 180.0) -> Job:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        job = Job.objects.get(kind="fit", subject_id=fit.pk)
        if job.state not in Job.OPEN:
            return job
        time.sleep(0.2)
    raise AssertionError(f"the fit is still {job.state} after {seconds} s: {job.message}")


@pytest.mark.django_db(transaction=True)
def test_the_published_optimum_is_reached_through_a_real_worker(
    celery_worker_process: Callable[..., Any],
) -> None:
    worker = celery_worker_process(concurrency=1)
    fit = ask()
    job = wait_for(fit)
    assert job.state == Job.State.DONE, (job.message, worker.log())
    result = result_of(Fit.objects.get(pk=fit.pk))
    assert result is not None and result.status == "converged"
    assert result.residual_sum == pytest.approx(19.87217, rel=1e-4)
    for constant in result.constants.all():
        assert constant.value * 60 * 1e5 == pytest.approx(PUBLISHED[constant.name], rel=1e-3)
        assert constant.unit == "1/s"
    # Standard errors in 1e-5 per minute, recomputed for these data with the matrix exponential.
    errors = {c.name: c.standard_error * 60 * 1e5 for c in result.constants.all()}
    assert errors["k_1"] == pytest.approx(0.05071, rel=2e-3)
    assert errors["k_4"] == pytest.approx(2.3207, rel=2e-3)

    user = fit.created_by
    grid = grid_of(user=user, project_id=fit.project_id)
    assert grid.cells["1947", fit.pk].verdict in ("consistent", "strained")
    assert evidence_of(user=user, fit_id=fit.pk).aicc is not None
    up = {link.parent[0] for link in lineage(kind="fit result", record_id=result.pk, upward=True)}
    assert {"instrument file", "signal table", "reduction", "concentration table", "dataset", "fit"} <= up
    assert chain_breaks() == []
