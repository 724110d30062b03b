"""The whole way from a file to a fit, as short calls."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from kinetics_db.accounts.models import User
from kinetics_db.evidence.services import compute_and_assess
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.selectors import result_of
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import claim_job
from kinetics_db.materials.services import enter_compound
from kinetics_db.measurements.models import ConcentrationTable
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run
from kinetics_db.runs.services import log_run


def make_run(user: User, project_id: int, code: str, charges: Mapping[str, Amount], **more: Any) -> Run:
    """A run whose compounds are entered as needed."""
    for name in charges:
        enter_compound(user=user, project_id=project_id, name=name, molar_mass=100.0)
    entry = RunEntry(
        code=code, charges=[ChargeEntry(amount, compound=name) for name, amount in charges.items()], **more
    )
    return log_run(user=user, project_id=project_id, entry=entry).run


def make_reported_table(
    user: User, run: Run, text: str, columns: Mapping[str, str], *, name: str = "export.txt", **recipe: Any
) -> ConcentrationTable:
    """A table whose columns (signal -> name) already are concentrations or percentages."""
    signals = store_file(user=user, run=run, name=name, data=text.encode())
    plain = {
        "kind": "as reported",
        "columns": [{"signal": signal, "species": target} for signal, target in columns.items()],
        **recipe,
    }
    return reduce_signals(user=user, signal_table=signals, name="as reported", recipe=plain)


def lines(*rows: Sequence[object]) -> str:
    """Comma-separated lines of a file."""
    return "\n".join(",".join(str(v) for v in row) for row in rows) + "\n"


def compute_now(fit: Fit) -> FitResult:
    """Do a requested fit's job in this process, as a worker would."""
    job = job_for(kind="fit", subject_id=fit.pk)
    claim = claim_job(job.pk)
    assert claim is not None
    compute_and_assess(claim)
    result = result_of(Fit.objects.get(pk=fit.pk))
    assert result is not None
    return result
