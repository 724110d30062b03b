"""Reads about fits."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from django.db.models import Count, Exists, OuterRef, Prefetch, Q, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.datasets.selectors import stale_dataset_ids
from kinetics_db.errors import NotFound
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.jobs.selectors import open_subjects
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


def contents_of(results: Sequence[FitResult]) -> dict[int, dict[str, Any]]:
    """Plain values of several results by result id, in one query."""
    stored = FitResult.objects.filter(pk__in=[result.pk for result in results]).values_list("pk", "canonical")
    return {pk: dict(json.loads(bytes(canonical))) for pk, canonical in stored}


@dataclass(frozen=True)
class FitCounts:
    """Fits of a project: waiting or running, with a result, and those of the latter whose data have changed."""

    open: int = 0
    finished: int = 0
    stale: int = 0


def fit_counts(*, user: User) -> dict[int, FitCounts]:
    """Counts for each project that the person may see and that has fits, in two queries."""
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
