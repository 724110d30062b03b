"""Tasks: load an id, call a service. A message that finds nothing to claim is a doorbell rung twice."""

from __future__ import annotations

import logging

from celery import shared_task

from kinetics_db.errors import RatewrightError, Unavailable
from kinetics_db.evidence.services import compute_and_assess
from kinetics_db.jobs import services as jobs
from kinetics_db.task_queue import RUN_JOB, SWEEP_JOBS
from workers.sweeping import sweep_once

log = logging.getLogger(__name__)

WORK = {"fit": compute_and_assess}
"""Kind of job -> the service that does it; the service ends the job itself, together with its result."""


@shared_task(name=RUN_JOB, ignore_result=True)
def run_job(job_id: int) -> None:
    """Do a job if it is still there to be done."""
    claim = jobs.claim_job(job_id)
    if claim is None:
        return
    log.info("attempt %d at job %d (%s %d)", claim.token, claim.job_id, claim.kind, claim.subject_id)
    try:
        WORK[claim.kind](claim)
    except jobs.LeaseLost as lost:
        log.warning("%s", lost)
    except Unavailable as error:
        jobs.give_back(claim, reason=str(error))
    except RatewrightError as error:
        jobs.fail_job(claim, reason=str(error))
    except Exception as error:
        log.exception("attempt %d at job %d broke", claim.token, claim.job_id)
        jobs.give_back(claim, reason=f"{type(error).__name__}: {error}")


@shared_task(name=SWEEP_JOBS, ignore_result=True)
def sweep_jobs(_record_id: int = 0) -> None:
    """Only a bell: a sweep looks at the rows, so it does no harm however often it comes."""
    sweep_once()
