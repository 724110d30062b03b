"""Judging a fit, and doing the whole background job: compute, judge, store, all or nothing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from kinetics_db.engine import comparison
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.run_evidence import RunEvidence as EngineRunEvidence
from kinetics_db.engine.run_evidence import Thresholds, evidence_of_runs
from kinetics_db.errors import InvalidInput
from kinetics_db.evidence.models import ModelEvidence, RunEvidence
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.selectors import load_fit
from kinetics_db.fits.services import Computed, Pulse, compute_fit, store_result
from kinetics_db.fits.services.compute import number, result_content
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.services import Claim, finishing, heartbeat
from kinetics_db.provenance.services import Prepared, prepared, recording, save_record

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
    thresholds = thresholds_of(fit)  # before the work, so that a wrong setting costs none
    pulse = Pulse(claim)
    computed = compute_fit(fit, pulse)
    judged = bool(computed.outcome.experiments)
    model = comparison.evidence_of_model(computed.outcome) if judged else None
    runs = _judge(computed, thresholds, pulse) if judged else ()
    content = prepared(result_content(computed))
    verdicts = prepared(_content(content.digest, model, runs, thresholds)) if model is not None else None
    heartbeat(claim, progress=0.99, message="storing the result", heed_stop=False)
    message = f"{computed.outcome.status}: {computed.outcome.message}"
    with (
        recording(user=fit.created_by),
        finishing(claim, state=JOB_STATE[computed.outcome.status], message=message),
    ):
        result = store_result(computed, content, token=claim.token)
        if model is not None and verdicts is not None:
            store_evidence(computed, result, model, runs, verdicts)


def _judge(computed: Computed, thresholds: Thresholds, pulse: Pulse) -> tuple[EngineRunEvidence, ...]:
    return evidence_of_runs(
        computed.outcome, thresholds, rtol=computed.request.settings.rtol, on_work=pulse.judging
    )


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


def _content(
    result_digest: str,
    model: comparison.ModelEvidence,
    runs: tuple[EngineRunEvidence, ...],
    thresholds: Thresholds,
) -> dict[str, Any]:
    """Plain values of evidence, with the thresholds that it was judged by."""
    return {
        "format": FORMAT,
        "result": result_digest,
        "thresholds": asdict(thresholds),
        "model": finite(asdict(model)),
        "runs": [{k: v for k, v in finite(asdict(run)).items() if k != "thresholds"} for run in runs],
    }


def store_evidence(
    computed: Computed,
    result: FitResult,
    model: comparison.ModelEvidence,
    runs: tuple[EngineRunEvidence, ...],
    content: Prepared,
) -> ModelEvidence:
    """Store verdicts; must run inside `recording()`."""
    fit = computed.fit
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
            **_what_decided(by_name[name]),
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


def _what_decided(run: EngineRunEvidence) -> dict[str, Any]:
    """The observable that decided, with its own p and error, and the pull that went farthest."""
    decided = next((o for o in run.observables if o.observable == run.worst_observable), None)
    farthest = max(run.pulls, key=lambda p: abs(p.pull), default=None)
    tests = [decided.chi_square_p_adjusted, decided.runs_p_adjusted] if decided is not None else []
    return {
        "observable": decided.observable[:120] if decided is not None else "",
        "p_value": min((p for p in tests if p is not None), default=None),
        "nrmse": number(decided.nrmse) if decided is not None else None,
        "pull": number(farthest.pull) if farthest is not None else None,
        "pull_name": farthest.name[:300] if farthest is not None else "",
    }


def finite(value: Any) -> Any:
    """A plain copy in which what is not finite is None."""
    if isinstance(value, Mapping):
        return {key: finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [finite(item) for item in value]
    return number(value)
