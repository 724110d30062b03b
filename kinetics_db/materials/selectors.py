"""Reads about materials: the newest revisions by name."""

from __future__ import annotations

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


def compounds_in(*, user: User, project_id: int) -> QuerySet[Compound]:
    """Compounds of a project by name."""
    require_reader(user=user, project_id=project_id)
    return Compound.objects.filter(project_id=project_id).order_by("name")


def compound_named(*, project_id: int, name: str) -> CompoundRevision:
    """Newest revision of a compound; NotFound names it."""
    found = (
        CompoundRevision.objects.filter(compound__project_id=project_id, compound__name=name)
        .select_related("compound")
        .order_by("-number")
        .first()
    )
    if found is None:
        raise NotFound(f"there is no compound '{name}' in this project")
    return found


def lot_named(*, project_id: int, code: str) -> LotRevision:
    """Newest revision of a lot; NotFound names it."""
    found = (
        LotRevision.objects.filter(lot__project_id=project_id, lot__code=code)
        .select_related("lot", "compound_revision__compound")
        .order_by("-number")
        .first()
    )
    if found is None:
        raise NotFound(f"there is no lot '{code}' in this project")
    return found


def stock_named(*, project_id: int, code: str) -> StockRevision:
    """Newest revision of a stock; NotFound names it."""
    found = (
        StockRevision.objects.filter(stock__project_id=project_id, stock__code=code)
        .select_related("stock")
        .order_by("-number")
        .first()
    )
    if found is None:
        raise NotFound(f"there is no stock '{code}' in this project")
    return found


def components_of(revision: StockRevision) -> list[StockComponent]:
    """Compounds in a stock, in the order of its recipe."""
    return list(
        revision.components.select_related("compound_revision__compound", "lot_revision__lot").order_by("pk")
    )
