"""The evidence grid: runs down, model versions across, a verdict where they meet; all of it or a part."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from typing import Any

from django.db.models import F, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import Staleness, staleness_of
from kinetics_db.evidence.models import VERDICTS, ModelEvidence, RunEvidence
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
class Origin:
    """What a column was made from, and when and by whom its fit was asked for."""

    evidence_id: int
    version_id: int
    mechanism_name: str
    dataset_id: int
    dataset_name: str
    dataset_number: int
    dataset_digest: str
    asked: datetime
    asked_by: str
    engine_version: str


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
    origin: Origin | None = None


@dataclass(frozen=True)
class Columns:
    """Columns of a grid, in order of mechanism, version and dataset.

    ``left_out`` counts the older ones that are not among them, ``mechanisms`` names those of all columns.
    """

    columns: Sequence[GridColumn]
    left_out: int = 0
    mechanisms: Sequence[str] = ()


@dataclass(frozen=True)
class Grid:
    """Runs down, model versions across. A missing cell was never tried."""

    runs: Sequence[str]
    columns: Sequence[GridColumn]
    cells: Mapping[tuple[str, int], Cell] = field(default_factory=dict)
    """(run code, fit id) -> verdict"""


def grid_of(
    *,
    user: User,
    project_id: int,
    run_ids: Sequence[int] | None = None,
    columns: Sequence[GridColumn] | None = None,
) -> Grid:
    """The evidence grid of a project: in each dataset the newest result of each mechanism version.

    ``run_ids`` and ``columns`` (from `grid_columns`) choose a part of it. Five queries, whatever the number of
    runs and fits.
    """
    require_reader(user=user, project_id=project_id)
    if columns is None:
        columns = _chosen(project_id).columns
    runs = Run.objects.filter(project_id=project_id)
    if run_ids is not None:
        runs = runs.filter(pk__in=run_ids)
    codes = tuple(runs.order_by("code").values_list("code", flat=True))
    return Grid(codes, columns, _cells(project_id, columns, run_ids))


def grid_columns(*, user: User, project_id: int, mechanism: str = "", most: int | None = None) -> Columns:
    """The columns of a project's grid: of one mechanism or all, the ``most`` newest of them; two queries."""
    require_reader(user=user, project_id=project_id)
    return _chosen(project_id, mechanism, most)


def _chosen(project_id: int, mechanism: str = "", most: int | None = None) -> Columns:
    newest = _newest(project_id)
    compared: dict[str, list[float]] = {}
    for column, data_key in newest:
        if column.aicc is not None and column.status == "converged":
            compared.setdefault(data_key, []).append(column.aicc)
    wanted = [
        (column, data_key)
        for column, data_key in newest
        if not mechanism or _origin(column).mechanism_name == mechanism
    ]
    newest_first = sorted((_origin(column).evidence_id for column, _ in wanted), reverse=True)
    kept = set(newest_first[:most])
    chosen = [pair for pair in wanted if _origin(pair[0]).evidence_id in kept]
    stale = staleness_of(sorted({_origin(column).dataset_id for column, _ in chosen}))
    return Columns(
        tuple(
            replace(
                column,
                stale=stale[_origin(column).dataset_id],
                delta_aicc=_delta(column, compared.get(data_key, [])),
            )
            for column, data_key in chosen
        ),
        len(wanted) - len(chosen),
        tuple(dict.fromkeys(_origin(column).mechanism_name for column, _ in newest)),
    )


def tried_run_ids(columns: Iterable[GridColumn]) -> QuerySet[RunEvidence, Any]:
    """Ids of the runs that have a verdict in any of the columns, to stand inside another query."""
    evidence = [_origin(column).evidence_id for column in columns]
    return RunEvidence.objects.filter(evidence_id__in=evidence).values("run_revision__run_id")


def _newest(project_id: int) -> list[tuple[GridColumn, str]]:
    """Columns without staleness and comparison, each with what its points and weights are known by."""
    rows = (
        ModelEvidence.objects.filter(result__fit__project_id=project_id)
        .values(
            "pk", "aicc", "bic", "data_key",
            status=F("result__status"),
            fit=F("result__fit_id"),
            asked=F("result__fit__created"),
            asked_by=F("result__fit__created_by__username"),
            engine=F("result__fit__engine_version"),
            version=F("result__fit__mechanism_version_id"),
            number=F("result__fit__mechanism_version__number"),
            name=F("result__fit__mechanism_version__mechanism__name"),
            dataset=F("result__fit__dataset_id"),
            dataset_name=F("result__fit__dataset__name"),
            dataset_number=F("result__fit__dataset__number"),
            dataset_digest=F("result__fit__dataset__digest"),
        )
        .order_by("name", "number", "dataset_name", "dataset_number", "pk")
    )  # fmt: skip
    # Finished results win over stopped ones, the newest of them over older ones.
    found = {}
    for row in sorted(rows, key=lambda row: (row["status"] != "stopped", row["pk"])):
        found[row["version"], row["dataset"]] = row
    order = {row["pk"]: place for place, row in enumerate(rows)}
    return [
        (
            GridColumn(
                fit_id=row["fit"],
                mechanism=f"{row['name']} v{row['number']}",
                dataset=f"{row['dataset_name']} v{row['dataset_number']}",
                status=row["status"],
                aicc=row["aicc"],
                bic=row["bic"],
                stale=Staleness(),
                delta_aicc=None,
                origin=Origin(
                    evidence_id=row["pk"],
                    version_id=row["version"],
                    mechanism_name=row["name"],
                    dataset_id=row["dataset"],
                    dataset_name=row["dataset_name"],
                    dataset_number=row["dataset_number"],
                    dataset_digest=row["dataset_digest"],
                    asked=row["asked"],
                    asked_by=row["asked_by"],
                    engine_version=row["engine"],
                ),
            ),
            row["data_key"],
        )
        for row in sorted(found.values(), key=lambda row: order[row["pk"]])
    ]


def _origin(column: GridColumn) -> Origin:
    assert column.origin is not None
    return column.origin


def _delta(column: GridColumn, compared: Sequence[float]) -> float | None:
    if column.aicc is None or column.status != "converged" or len(compared) < 2:
        return None
    return column.aicc - min(compared)


def _cells(
    project_id: int, columns: Sequence[GridColumn], run_ids: Sequence[int] | None
) -> dict[tuple[str, int], Cell]:
    rows = RunEvidence.objects.filter(
        evidence_id__in=[_origin(column).evidence_id for column in columns],
        run_revision__run__project_id=project_id,
    )
    if run_ids is not None:
        rows = rows.filter(run_revision__run_id__in=run_ids)
    cells: dict[tuple[str, int], Cell] = {}
    for row in rows.order_by("pk").values(
        "verdict", "observable", "p_value", "nrmse", "pull", "pull_name",
        code=F("run_revision__run__code"), fit=F("evidence__result__fit_id"), table_number=F("table__number"),
    ):  # fmt: skip
        code = row["code"]
        cell = Cell(
            verdict=row["verdict"],
            observable=row["observable"],
            p_value=row["p_value"],
            nrmse=row["nrmse"],
            pull=row["pull"],
            pull_name=row["pull_name"],
            fit_id=row["fit"],
            table=f"{code} t{row['table_number']}",
        )
        place = code, row["fit"]
        # A run with several tables in one dataset is judged by the worst of them.
        if place not in cells or VERDICTS.index(cell.verdict) > VERDICTS.index(cells[place].verdict):
            cells[place] = cell
    return cells
