"""The evidence grid: which model version explains which run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from django.db.models import Case, When

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import Staleness, staleness_of
from kinetics_db.errors import NotFound
from kinetics_db.evidence.models import VERDICTS, ModelEvidence, RunEvidence
from kinetics_db.fits.selectors import fit_by_id
from kinetics_db.projects.selectors import require_reader
from kinetics_db.runs.models import Run


@dataclass(frozen=True)
class Cell:
    """One verdict: a run under a fit result.

    ``p_value`` and ``nrmse`` are those of ``observable``, the one that decided; ``pull`` is the farthest pull
    among the run's nuisance parameters, in standard deviations of its prior.
    """

    verdict: str
    p_value: float | None
    nrmse: float | None
    fit_id: int
    table: str
    observable: str = ""
    pull: float | None = None
    pull_name: str = ""


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
    """AICc above the lowest of the converged fits to the same points with the same weights; None without another."""


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
        # Finished results come last and so win over stopped ones, the newest of them last.
        .annotate(finished=Case(When(result__status="stopped", then=0), default=1))
        .order_by(
            "result__fit__mechanism_version__mechanism__name",
            "result__fit__mechanism_version__number",
            "finished",
            "pk",
        )
    )
    newest = {(e.result.fit.mechanism_version_id, e.result.fit.dataset_id): e for e in found}
    chosen = list(newest.values())
    stale = staleness_of(sorted({e.result.fit.dataset_id for e in chosen}))
    columns = tuple(_column(e, chosen, stale) for e in chosen)
    cells: dict[tuple[str, int], Cell] = {}
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
        cell = Cell(
            verdict=row.verdict,
            observable=row.observable,
            p_value=row.p_value,
            nrmse=row.nrmse,
            pull=row.pull,
            pull_name=row.pull_name,
            fit_id=fit_id,
            table=str(row.table),
        )
        place = row.run_revision.run.code, fit_id
        # A run with several tables in one dataset is judged by the worst of them.
        if place not in cells or VERDICTS.index(cell.verdict) > VERDICTS.index(cells[place].verdict):
            cells[place] = cell
    codes = tuple(Run.objects.filter(project_id=project_id).order_by("code").values_list("code", flat=True))
    return Grid(codes, columns, cells)


def _column(
    evidence: ModelEvidence, chosen: Sequence[ModelEvidence], stale: Mapping[int, Staleness]
) -> GridColumn:
    fit = evidence.result.fit
    comparable = [
        other.aicc
        for other in chosen
        if other.aicc is not None
        and other.data_key == evidence.data_key
        and other.result.status == "converged"
    ]
    delta = None
    if evidence.aicc is not None and evidence.result.status == "converged" and len(comparable) > 1:
        delta = evidence.aicc - min(comparable)
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
        fit_by_id(user=user, fit_id=fit_id)  # tells a stranger nothing
        raise NotFound("this fit has no evidence yet")
    require_reader(user=user, project_id=found.result.fit.project_id)
    return found
