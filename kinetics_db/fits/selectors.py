"""Reads about fits."""

from __future__ import annotations

from django.db.models import Prefetch, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.projects.selectors import require_reader


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
        Fit.objects.select_related("mechanism_version__mechanism", "dataset", "created_by").filter(pk=fit_id).first()
    )
    if fit is None:
        raise NotFound("there is no such fit that you may see")
    return fit


def result_of(fit: Fit) -> FitResult | None:
    """The finished result of a fit, else its newest stopped one, else None."""
    results = sorted(fit.results.all(), key=lambda r: (r.status != FitResult.Status.STOPPED, r.pk))
    return results[-1] if results else None
