"""Which model versions explain one run: every verdict on it, and the versions that were never tried on it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from django.db.models import F

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import stale_among
from kinetics_db.errors import NotFound
from kinetics_db.evidence.models import RunEvidence
from kinetics_db.mechanisms.selectors import versions_in
from kinetics_db.projects.selectors import NOT_VISIBLE, require_reader
from kinetics_db.runs.models import Run

MOST = 500
"""Newest verdicts, and names of untried versions, that are listed."""


@dataclass(frozen=True)
class Version:
    """A mechanism version by name."""

    id: int
    mechanism: str
    number: int

    def __str__(self) -> str:
        return f"{self.mechanism} v{self.number}"


@dataclass(frozen=True)
class Explanation:
    """One verdict on the run.

    Attributes
    ----------
    version, fit_id, dataset_id, dataset : what was fitted
    fit_status : 'converged', 'stopped' ...
    verdict : one of `evidence.models.VERDICTS`
    observable, p_value, nrmse : which one decided, its smallest adjusted p, its normalised residual
    pull, pull_name : farthest pull among the run's nuisance parameters, in standard deviations of its prior
    table, revision : number of the table and of the run's revision that were used
    when, asked_by : when it was judged, and who asked for the fit
    stale : why it is no longer current; empty when it is
    """

    version: Version
    fit_id: int
    dataset_id: int
    dataset: str
    fit_status: str
    verdict: str
    observable: str
    p_value: float | None
    nrmse: float | None
    pull: float | None
    pull_name: str
    table_id: int
    table: int
    revision: int
    when: datetime
    asked_by: str
    stale: tuple[str, ...]


@dataclass(frozen=True)
class Explanations:
    """Verdicts on a run, newest first, and the versions of its project that have none; ``more`` were left out."""

    run: Run
    verdicts: Sequence[Explanation]
    untried: Sequence[Version]
    more: bool = False


def explanations_of_run(*, user: User, run_id: int) -> Explanations:
    """Every model version that was tried on a run, with its verdicts; six queries, whatever their number."""
    run = Run.objects.select_related("project").filter(pk=run_id).first()
    if run is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=run.project_id)
    rows = list(_rows(run)[: MOST + 1])
    stale = stale_among(row["dataset_id"] for row in rows)
    tried = RunEvidence.objects.filter(run_revision__run=run).values(
        "evidence__result__fit__mechanism_version_id"
    )
    untried = versions_in(user=user, project_id=run.project_id).exclude(pk__in=tried)
    names = untried.values_list("pk", "mechanism__name", "number")[:MOST]
    return Explanations(
        run,
        [_explanation(run, row, row["dataset_id"] in stale) for row in rows[:MOST]],
        [Version(*name) for name in names],
        more=len(rows) > MOST,
    )


def _rows(run: Run) -> Any:
    fit = "evidence__result__fit"
    return (
        RunEvidence.objects.filter(run_revision__run=run)
        .order_by("-evidence_id", "-id")
        .values(
            "verdict", "observable", "p_value", "nrmse", "pull", "pull_name", "table_id",
            table_number=F("table__number"),
            revision=F("run_revision__number"),
            superseded=F("table__superseded_by__id"),
            when=F("evidence__created"),
            fit_status=F("evidence__result__status"),
            fit_id=F("evidence__result__fit_id"),
            asked_by=F(f"{fit}__created_by__username"),
            version_id=F(f"{fit}__mechanism_version_id"),
            version=F(f"{fit}__mechanism_version__number"),
            mechanism=F(f"{fit}__mechanism_version__mechanism__name"),
            dataset_id=F(f"{fit}__dataset_id"),
            dataset_name=F(f"{fit}__dataset__name"),
            dataset_number=F(f"{fit}__dataset__number"),
        )
    )  # fmt: skip


def _explanation(run: Run, row: dict[str, Any], dataset_changed: bool) -> Explanation:
    same = (
        "fit_id fit_status verdict observable p_value nrmse pull pull_name "
        "dataset_id table_id revision when asked_by"
    )
    return Explanation(
        version=Version(row["version_id"], row["mechanism"], row["version"]),
        dataset=f"{row['dataset_name']} v{row['dataset_number']}",
        table=row["table_number"],
        stale=tuple(_why_stale(run, row, dataset_changed)),
        **{name: row[name] for name in same.split()},
    )


def _why_stale(run: Run, row: dict[str, Any], dataset_changed: bool) -> list[str]:
    reasons = []
    if row["revision"] < run.latest_number:
        reasons.append(f"the run has been revised (r{row['revision']} used, r{run.latest_number} is newest)")
    if row["superseded"] is not None:
        reasons.append(f"table {row['table_number']} has been superseded")
    if dataset_changed and not reasons:
        reasons.append("other data of its dataset have changed")
    return reasons
