"""Reads about runs."""

from __future__ import annotations

from collections.abc import Sequence

from django.db.models import F, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.projects.selectors import require_reader
from kinetics_db.runs.models import Run, RunCondition, RunRevision


def runs_in(*, user: User, project_id: int) -> QuerySet[Run]:
    """Runs of a project by code."""
    require_reader(user=user, project_id=project_id)
    return Run.objects.filter(project_id=project_id).select_related("project", "created_by").order_by("code")


def run_by_id(*, user: User, run_id: int) -> Run:
    """One run that the person may see."""
    run = Run.objects.select_related("project").filter(pk=run_id).first()
    if run is None:
        raise NotFound("there is no such run that you may see")
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
    newest = RunRevision.objects.filter(run_id__in=run_ids, number=F("run__latest_number")).select_related("run")
    return {revision.run_id: revision for revision in newest}


def conditions_of(run_ids: Sequence[int]) -> dict[int, dict[str, float]]:
    """Searchable conditions of runs, by run id and key, in one query."""
    found: dict[int, dict[str, float]] = {run_id: {} for run_id in run_ids}
    for run_id, key, value in RunCondition.objects.filter(run_id__in=run_ids).values_list("run_id", "key", "value"):
        found[run_id][key] = value
    return found
