"""Reads about materials: the newest revisions by name."""

from __future__ import annotations

from typing import TypeVar

from django.db.models import QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.materials.models import (
    Compound,
    CompoundRevision,
    LotRevision,
    StockComponent,
    StockRevision,
)
from kinetics_db.projects.selectors import require_reader

R = TypeVar("R", CompoundRevision, LotRevision, StockRevision)


def compounds_in(*, user: User, project_id: int) -> QuerySet[Compound]:
    """Compounds of a project by name."""
    require_reader(user=user, project_id=project_id)
    return Compound.objects.filter(project_id=project_id).order_by("name")


def compound_named(*, project_id: int, name: str) -> CompoundRevision:
    """Newest revision of a compound; NotFound names it."""
    revisions = CompoundRevision.objects.filter(compound__project_id=project_id, compound__name=name)
    return _newest(revisions.select_related("compound"), f"compound '{name}'")


def lot_named(*, project_id: int, code: str) -> LotRevision:
    """Newest revision of a lot; NotFound names it."""
    revisions = LotRevision.objects.filter(lot__project_id=project_id, lot__code=code)
    return _newest(revisions.select_related("lot", "compound_revision__compound"), f"lot '{code}'")


def stock_named(*, project_id: int, code: str) -> StockRevision:
    """Newest revision of a stock; NotFound names it."""
    revisions = StockRevision.objects.filter(stock__project_id=project_id, stock__code=code)
    return _newest(revisions.select_related("stock"), f"stock '{code}'")


def components_of(revision: StockRevision) -> list[StockComponent]:
    """Compounds in a stock, in the order of its recipe."""
    return list(
        revision.components.select_related("compound_revision__compound", "lot_revision__lot").order_by("pk")
    )


def _newest(revisions: QuerySet[R], thing: str) -> R:
    found = revisions.order_by("-number").first()
    if found is None:
        raise NotFound(f"there is no {thing} in this project")
    return found
