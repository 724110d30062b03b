"""Reads about fits."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from django.db.models import Case, Count, Exists, OuterRef, Prefetch, Q, QuerySet, Subquery, When

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import stale_dataset_ids
from kinetics_db.errors import NotFound
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.jobs.selectors import job_of_each, open_subjects
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader

FINISHED = (FitResult.Status.CONVERGED, FitResult.Status.NOT_CONVERGED)


def fits_in(*, user: User, project_id: int) -> QuerySet[Fit]:
    """Fits of a project, newest first, with their results."""
    require_reader(user=user, project_id=project_id)
    return (
        Fit.objects.filter(project_id=project_id)
        .select_related("mechanism_version__mechanism", "dataset", "created_by")
        .prefetch_related(Prefetch("results", queryset=FitResult.objects.order_by("-id").defer("canonical")))
        .order_by("-created", "-id")
    )


def fit_lines(*, user: User, project_id: int) -> QuerySet[Fit]:
    """Fits of a project, newest first, as a list shows them: one query, without canonical bytes.

    Each has ``job_state``, ``job_progress`` and ``job_message`` of its job, ``result_status`` and
    ``result_seconds`` of its result (None without one), and ``stale``: whether its data have changed since.
    """
    require_reader(user=user, project_id=project_id)
    job = job_of_each(kind="fit", subject="pk")
    # As in `result_of`: a finished result, else the newest stopped one.
    result = (
        FitResult.objects.filter(fit=OuterRef("pk"))
        .annotate(finished=Case(When(status=FitResult.Status.STOPPED, then=0), default=1))
        .order_by("-finished", "-pk")
    )
    return (
        Fit.objects.filter(project_id=project_id)
        .select_related("mechanism_version__mechanism", "dataset", "created_by")
        .defer("canonical", "dataset__canonical", "mechanism_version__canonical", "mechanism_version__text")
        .annotate(
            job_state=Subquery(job.values("state")[:1]),
            job_progress=Subquery(job.values("progress")[:1]),
            job_message=Subquery(job.values("message")[:1]),
            result_status=Subquery(result.values("status")[:1]),
            result_seconds=Subquery(result.values("seconds")[:1]),
            stale=Q(dataset_id__in=stale_dataset_ids(project_id=project_id)),
        )
        .order_by("-created", "-id")
    )


def fits_under_way(*, user: User, project_id: int) -> QuerySet[Fit]:
    """Those of a project's `fit_lines` that wait or run."""
    return fit_lines(user=user, project_id=project_id).filter(pk__in=open_subjects(kind="fit"))


def fits_of_mechanisms(mechanism_ids: Sequence[int]) -> dict[int, int]:
    """How many fits each mechanism has in all its versions, by mechanism id, in one query."""
    counted = (
        Fit.objects.filter(mechanism_version__mechanism_id__in=mechanism_ids)
        .order_by()
        .values_list("mechanism_version__mechanism_id")
    )
    return dict(counted.annotate(n=Count("pk")))


def fit_by_id(*, user: User, fit_id: int) -> Fit:
    """One fit that the person may see."""
    fit = load_fit(fit_id)
    require_reader(user=user, project_id=fit.project_id)
    return fit


def load_fit(fit_id: int) -> Fit:
    """One fit, for a worker that acts for nobody in particular."""
    fit = (
        Fit.objects.select_related("mechanism_version__mechanism", "dataset", "created_by")
        .filter(pk=fit_id)
        .first()
    )
    if fit is None:
        raise NotFound(NOT_VISIBLE)
    return fit


def result_of(fit: Fit) -> FitResult | None:
    """The finished result of a fit, else its newest stopped one, else None."""
    results = sorted(fit.results.all(), key=lambda r: (r.status != FitResult.Status.STOPPED, r.pk))
    return results[-1] if results else None


@dataclass(frozen=True)
class FitCounts:
    """Fits of a project: waiting or running, with a result, and those of the latter whose data have changed."""

    open: int = 0
    finished: int = 0
    stale: int = 0


def fit_counts(*, user: User) -> dict[int, FitCounts]:
    """Counts for each project that the person may see and that has fits, in one query."""
    finished = Exists(FitResult.objects.filter(fit=OuterRef("pk"), status__in=FINISHED))
    counted = (
        Fit.objects.filter(project__in=projects_visible_to(user))
        .order_by()
        .values_list("project_id")
        .annotate(
            open=Count("pk", filter=Q(pk__in=open_subjects(kind="fit"))),
            finished=Count("pk", filter=finished),
            stale=Count("pk", filter=finished & Q(dataset_id__in=stale_dataset_ids())),
        )
    )
    return {project_id: FitCounts(*counts) for project_id, *counts in counted}
