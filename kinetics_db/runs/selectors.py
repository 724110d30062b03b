"""Reads about runs."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from django.db.models import Count, F, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader
from kinetics_db.runs.models import Run, RunCondition, RunRevision


def runs_in(*, user: User, project_id: int) -> QuerySet[Run]:
    """Runs of a project by code."""
    require_reader(user=user, project_id=project_id)
    return Run.objects.filter(project_id=project_id).select_related("project", "created_by").order_by("code")


def run_by_id(*, user: User, run_id: int) -> Run:
    """One run that the person may see."""
    run = Run.objects.select_related("project").filter(pk=run_id).first()
    if run is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=run.project_id)
    return run


def run_named(*, user: User, project_id: int, code: str) -> Run:
    """The run of that code in a project."""
    run = runs_in(user=user, project_id=project_id).filter(code=code).first()
    if run is None:
        raise NotFound(f"there is no run '{code}' in this project")
    return run


def latest_revision(run: Run) -> RunRevision:
    """The newest revision of a run."""
    return latest_revisions([run.pk])[run.pk]


def latest_revisions(run_ids: Sequence[int]) -> dict[int, RunRevision]:
    """The newest revision of each run, by run id, in one query."""
    newest = RunRevision.objects.filter(run_id__in=run_ids, number=F("run__latest_number")).select_related(
        "run"
    )
    return {revision.run_id: revision for revision in newest}


def conditions_of(run_ids: Sequence[int]) -> dict[int, dict[str, float]]:
    """Searchable conditions of runs, by run id and key, in one query."""
    found: dict[int, dict[str, float]] = {run_id: {} for run_id in run_ids}
    for run_id, key, value in RunCondition.objects.filter(run_id__in=run_ids).values_list(
        "run_id", "key", "value"
    ):
        found[run_id][key] = value
    return found


def newest_revisions_in(*, user: User, project_id: int) -> QuerySet[RunRevision]:
    """The newest revision of each run of a project, with its run, by code."""
    require_reader(user=user, project_id=project_id)
    return (
        RunRevision.objects.filter(run__project_id=project_id, number=F("run__latest_number"))
        .select_related("run", "created_by")
        .order_by("run__code")
    )


def run_counts(*, user: User) -> dict[int, int]:
    """Number of runs of each project that the person may see and that has any, in one query."""
    counted = Run.objects.filter(project__in=projects_visible_to(user)).order_by().values_list("project_id")
    return dict(counted.annotate(n=Count("pk")))


@dataclass(frozen=True)
class StartConcentration:
    """What was there of a compound at first contact: mol/L, or percent for a run in percent."""

    compound: str
    value: float
    standard_uncertainty: float


def start_concentrations(revision: RunRevision) -> tuple[StartConcentration, ...]:
    """Start concentrations of a revision in order of addition, each compound once.

    Contributions that share a cause of error (a flask, the vessel's volume) go wrong together and add up;
    different causes are independent (JCGM 100:2008, 5.2.2).
    """
    totals: dict[str, float] = {}
    by_cause: dict[str, dict[str, float]] = {}
    for position, part in enumerate(revision.content["start"]):
        name, value = part["compound"], part["concentration"]
        totals[name] = totals.get(name, 0.0) + value
        causes = by_cause.setdefault(name, {})
        causes[f"charge {position}"] = value * part["own_relative_u"]
        for shared in (*part["shared"], *part["run_shared"]):
            causes[shared["owner"]] = causes.get(shared["owner"], 0.0) + value * shared["relative_u"]
    return tuple(
        StartConcentration(name, value, math.hypot(*by_cause[name].values()))
        for name, value in totals.items()
    )
