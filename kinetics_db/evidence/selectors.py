"""Reads about evidence: which model version explains which run. The grid itself is in `grid`."""

from __future__ import annotations

from collections.abc import Sequence

from django.db.models import Count

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.evidence.explanations import Explanation as Explanation
from kinetics_db.evidence.explanations import Explanations as Explanations
from kinetics_db.evidence.explanations import explanations_of_run as explanations_of_run
from kinetics_db.evidence.grid import Cell as Cell
from kinetics_db.evidence.grid import Columns as Columns
from kinetics_db.evidence.grid import Grid as Grid
from kinetics_db.evidence.grid import GridColumn as GridColumn
from kinetics_db.evidence.grid import grid_columns as grid_columns
from kinetics_db.evidence.grid import grid_of as grid_of
from kinetics_db.evidence.grid import tried_run_ids as tried_run_ids
from kinetics_db.evidence.models import ModelEvidence, RunEvidence
from kinetics_db.fits.selectors import fit_by_id
from kinetics_db.projects.selectors import projects_visible_to, require_reader


def verdict_counts(*, user: User, fit_ids: Sequence[int]) -> dict[int, dict[str, int]]:
    """For each fit that the person may see how many runs of its result got each verdict; one query.

    Of several results the one that counts is taken: finished before stopped, newest first.
    """
    rows = (
        RunEvidence.objects.filter(
            evidence__result__fit_id__in=fit_ids,
            evidence__result__fit__project__in=projects_visible_to(user),
        )
        .order_by()
        .values_list("evidence__result__fit_id", "evidence__result__status", "evidence_id", "verdict")
        .annotate(n=Count("pk"))
    )
    newest: dict[int, tuple[bool, int]] = {}
    counts: dict[tuple[int, tuple[bool, int]], dict[str, int]] = {}
    for fit_id, status, evidence_id, verdict, n in rows:
        rank = (status != "stopped", evidence_id)
        newest[fit_id] = max(newest.get(fit_id, rank), rank)
        counts.setdefault((fit_id, rank), {})[verdict] = n
    return {fit_id: counts[fit_id, rank] for fit_id, rank in newest.items()}


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
