"""Judging a fit, and doing the whole background job: compute, judge, store, all or nothing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from kinetics_db.engine.canonical import digest
from kinetics_db.engine.comparison import (
    ModelEvidence as EngineModelEvidence,
)
from kinetics_db.engine.comparison import (
    RunEvidence as EngineRunEvidence,
)
from kinetics_db.engine.comparison import (
    Thresholds,
    evidence_of_model,
    evidence_of_runs,
)
from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.models import ModelEvidence, RunEvidence
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.selectors import load_fit
from kinetics_db.fits.services import Computed, compute_fit, store_result
from kinetics_db.fits.services.compute import number
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.services import Claim, finishing
from kinetics_db.provenance.services import recording, save_record

FORMAT = "ratewright/evidence/1"

#: How a fit's outcome ends its job. A fit that did not converge is done: its result says so.
JOB_STATE: Mapping[str, str] = {
    FitResult.Status.CONVERGED: Job.State.DONE,
    FitResult.Status.NOT_CONVERGED: Job.State.DONE,
    FitResult.Status.STOPPED: Job.State.STOPPED,
    FitResult.Status.CANNOT_START: Job.State.FAILED,
}


def compute_and_assess(claim: Claim) -> None:
    """Compute a fit, judge it, and store result, evidence and the job's end in one transaction."""
    fit = load_fit(claim.subject_id)
    computed = compute_fit(fit, claim)
    judged = bool(computed.outcome.experiments)
    thresholds = thresholds_of(fit)
    model = evidence_of_model(computed.outcome) if judged else None
    runs = evidence_of_runs(computed.outcome, thresholds) if judged else ()
    message = f"{computed.outcome.status}: {computed.outcome.message}"
    with (
        recording(user=fit.created_by),
        finishing(claim, state=JOB_STATE[computed.outcome.status], message=message),
    ):
        result = store_result(computed, token=claim.token)
        if model is not None:
            store_evidence(computed, result, model, runs, thresholds)


def thresholds_of(fit: Fit) -> Thresholds:
    """The verdict thresholds of the fit's project: the defaults and what the project sets differently."""
    try:
        return Thresholds(**fit.project.verdict_thresholds)
    except TypeError as error:
        raise InvalidInput(
            f"the project's verdict thresholds cannot be used: {error}",
            field="verdict_thresholds",
            cure=", ".join(asdict(Thresholds())),
        ) from error


def store_evidence(
    computed: Computed,
    result: FitResult,
    model: EngineModelEvidence,
    runs: tuple[EngineRunEvidence, ...],
    thresholds: Thresholds,
) -> ModelEvidence:
    """Store verdicts with the thresholds they were reached by; must run inside `recording()`."""
    fit = computed.fit
    content = {
        "format": FORMAT,
        "result": result.digest,
        "thresholds": asdict(thresholds),
        "model": finite(asdict(model)),
        "runs": [{k: v for k, v in finite(asdict(run)).items() if k != "thresholds"} for run in runs],
    }
    evidence = save_record(
        ModelEvidence(
            result=result,
            aicc=number(model.aicc),
            bic=number(model.bic),
            data_key=data_key(computed),
        ),
        user=fit.created_by,
        content=content,
        parents=[result],
        project_id=fit.project_id,
        label=f"{fit.mechanism_version} on {fit.dataset}",
        verb="judged",
    )
    by_name = {run.experiment: run for run in runs}
    RunEvidence.objects.bulk_create(
        RunEvidence(
            evidence=evidence,
            run_revision=item.run_revision,
            table=item.table,
            verdict=by_name[name].verdict,
            p_value=_smallest(by_name[name]),
            nrmse=_largest_error(by_name[name]),
        )
        for item, name in zip(computed.data.items, computed.data.names, strict=True)
    )
    return evidence


def data_key(computed: Computed) -> str:
    """A hash that is equal for fits of the same points with the same weights, and so comparable by AICc."""
    request = computed.request
    return digest(
        {
            "dataset": computed.fit.dataset.digest,
            "columns": sorted(
                column for column, target in request.casting.columns.items() if target is not None
            ),
            "error model": request.settings.error_model,
        }
    )


def _smallest(run: EngineRunEvidence) -> float | None:
    """The smallest adjusted p of the run's tests."""
    found = [
        p for o in run.observables for p in (o.chi_square_p_adjusted, o.runs_p_adjusted) if p is not None
    ]
    return min(found, default=None)


def _largest_error(run: EngineRunEvidence) -> float | None:
    found = [o.nrmse for o in run.observables if o.nrmse is not None]
    return number(max(found, default=None))


def finite(value: Any) -> Any:
    """A plain copy in which what is not finite is None."""
    if isinstance(value, Mapping):
        return {key: finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [finite(item) for item in value]
    return number(value)
