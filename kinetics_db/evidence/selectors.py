"""The evidence grid: which model version explains which run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import Staleness, staleness_of
from kinetics_db.errors import NotFound
from kinetics_db.evidence.models import ModelEvidence, RunEvidence
from kinetics_db.projects.selectors import require_reader
from kinetics_db.runs.models import Run


@dataclass(frozen=True)
class Cell:
    """One verdict: a run under a fit result."""

    verdict: str
    p_value: float | None
    nrmse: float | None
    fit_id: int
    table: str


@dataclass(frozen=True)
class GridColumn:
    """One mechanism version as fitted: the newest finished fit of it on one dataset."""

    fit_id: int
    mechanism: str
    dataset: str
    status: str
    aicc: float | None
    bic: float | None
    stale: Staleness
    delta_aicc: float | None
    """AICc above the lowest of the fits to the same points with the same weights; None where there is no other."""


@dataclass(frozen=True)
class Grid:
    """Runs down, model versions across. A missing cell was never tried."""

    runs: Sequence[str]
    columns: Sequence[GridColumn]
    cells: Mapping[tuple[str, int], Cell]
    """(run code, fit id) -> verdict"""


def grid_of(*, user: User, project_id: int) -> Grid:
    """The evidence grid of a project: in each dataset the newest result of each mechanism version.

    Five queries, whatever the number of runs and fits.
    """
    require_reader(user=user, project_id=project_id)
    found = (
        ModelEvidence.objects.filter(result__fit__project_id=project_id)
        .select_related("result__fit__mechanism_version__mechanism", "result__fit__dataset")
        .defer("result__canonical", "result__fit__dataset__canonical", "canonical")
        .order_by(
            "result__fit__mechanism_version__mechanism__name", "result__fit__mechanism_version__number", "pk"
        )
    )
    newest = {(e.result.fit.mechanism_version_id, e.result.fit.dataset_id): e for e in found}
    chosen = list(newest.values())
    stale = staleness_of(sorted({e.result.fit.dataset_id for e in chosen}))
    columns = tuple(_column(e, chosen, stale) for e in chosen)
    cells = {}
    rows = RunEvidence.objects.filter(evidence__in=chosen).select_related(
        "run_revision__run", "table__run", "evidence__result"
    )
    for row in rows.defer(
        "run_revision__canonical",
        "table__canonical",
        "table__blob",
        "evidence__canonical",
        "evidence__result__canonical",
    ):
        fit_id = row.evidence.result.fit_id
        cells[row.run_revision.run.code, fit_id] = Cell(
            row.verdict, row.p_value, row.nrmse, fit_id, str(row.table)
        )
    codes = tuple(Run.objects.filter(project_id=project_id).order_by("code").values_list("code", flat=True))
    return Grid(codes, columns, cells)


def _column(
    evidence: ModelEvidence, chosen: Sequence[ModelEvidence], stale: Mapping[int, Staleness]
) -> GridColumn:
    fit = evidence.result.fit
    comparable = [
        other.aicc for other in chosen if other.aicc is not None and other.data_key == evidence.data_key
    ]
    delta = evidence.aicc - min(comparable) if evidence.aicc is not None and len(comparable) > 1 else None
    return GridColumn(
        fit_id=fit.pk,
        mechanism=str(fit.mechanism_version),
        dataset=str(fit.dataset),
        status=evidence.result.status,
        aicc=evidence.aicc,
        bic=evidence.bic,
        stale=stale[fit.dataset_id],
        delta_aicc=delta,
    )


def evidence_of(*, user: User, fit_id: int) -> ModelEvidence:
    """Evidence of a fit's newest result."""
    found = (
        ModelEvidence.objects.filter(result__fit_id=fit_id)
        .select_related("result__fit__mechanism_version__mechanism")
        .order_by("-pk")
        .first()
    )
    if found is None:
        raise NotFound("there is no evidence for such a fit")
    require_reader(user=user, project_id=found.result.fit.project_id)
    return found
