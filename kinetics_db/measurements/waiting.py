"""Runs that wait for their instrument file or for its reduction: what a person does next."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from django.db.models import Case, Count, Exists, OuterRef, Q, QuerySet, Value, When

from kinetics_db.accounts.models import User
from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile
from kinetics_db.projects.selectors import projects_visible_to, require_reader
from kinetics_db.runs.models import Run

FILE, REDUCTION = "file", "reduction"


@dataclass(frozen=True)
class RunCounts:
    """Runs of a project, and those of them without a concentration table."""

    runs: int = 0
    waiting: int = 0


@dataclass(frozen=True)
class Waiting:
    """What a project's runs wait for, and the newest of those that wait; each has ``waits_for``."""

    for_file: int
    for_reduction: int
    newest: Sequence[Run]

    def __bool__(self) -> bool:
        return bool(self.for_file or self.for_reduction)


def run_counts(*, user: User) -> dict[int, RunCounts]:
    """Counts of each project that the person may see and that has runs, in one query."""
    counted = (
        Run.objects.filter(project__in=projects_visible_to(user))
        .order_by()
        .values_list("project_id")
        .annotate(runs=Count("pk"), waiting=Count("pk", filter=~_tabulated()))
    )
    return {project_id: RunCounts(runs, waiting) for project_id, runs, waiting in counted}


def waiting_in(*, user: User, project_id: int, most: int = 5) -> Waiting:
    """What the runs of a project wait for, in two queries at most."""
    require_reader(user=user, project_id=project_id)
    waiting = _with_state(Run.objects.filter(project_id=project_id)).exclude(waits_for="")
    counts = dict(waiting.order_by().values_list("waits_for").annotate(n=Count("pk")))
    newest = list(waiting.order_by("-created", "-id")[:most]) if counts else []
    return Waiting(counts.get(FILE, 0), counts.get(REDUCTION, 0), newest)


def runs_left_off(*, user: User, most: int = 6) -> list[Run]:
    """The runs that this person logged last, each with its project and ``waits_for``: 'file', 'reduction' or ''."""
    mine = Run.objects.filter(project__in=projects_visible_to(user), created_by=user)
    return list(_with_state(mine).select_related("project").order_by("-created", "-id")[:most])


def _tabulated() -> Exists:
    return Exists(ConcentrationTable.objects.filter(run=OuterRef("pk")))


def _with_state(runs: QuerySet[Run]) -> QuerySet[Any]:
    filed = Exists(InstrumentFile.objects.filter(run=OuterRef("pk")))
    return runs.annotate(
        waits_for=Case(
            When(_tabulated(), then=Value("")), When(Q(filed), then=Value(REDUCTION)), default=Value(FILE)
        )
    )
