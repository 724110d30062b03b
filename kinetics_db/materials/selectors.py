"""Reads about materials: the newest revisions by name."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import TypeVar

from django.db.models import Exists, F, OuterRef, QuerySet, Value

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.materials.models import (
    Compound,
    CompoundRevision,
    Lot,
    LotRevision,
    Stock,
    StockComponent,
    StockRevision,
)
from kinetics_db.projects.selectors import projects_visible_to, require_reader

R = TypeVar("R", CompoundRevision, LotRevision, StockRevision)


def compounds_in(*, user: User, project_id: int) -> QuerySet[Compound]:
    """Compounds of a project by name."""
    require_reader(user=user, project_id=project_id)
    return Compound.objects.filter(project_id=project_id).order_by("name")


def compounds_with_newest(*, user: User, project_id: int) -> QuerySet[CompoundRevision]:
    """The newest revision of each compound of a project, by name, with its author; its content says the rest."""
    require_reader(user=user, project_id=project_id)
    newer = CompoundRevision.objects.filter(compound=OuterRef("compound"), number__gt=OuterRef("number"))
    found = CompoundRevision.objects.filter(~Exists(newer), compound__project_id=project_id)
    return found.select_related("compound", "created_by").order_by("compound__name", "id")


def lots_in(*, user: User, project_id: int) -> QuerySet[LotRevision]:
    """The newest revision of each lot of a project, by code, with its compound and author."""
    require_reader(user=user, project_id=project_id)
    newer = LotRevision.objects.filter(lot=OuterRef("lot"), number__gt=OuterRef("number"))
    found = LotRevision.objects.filter(~Exists(newer), lot__project_id=project_id)
    return found.select_related("lot__compound", "created_by").order_by("lot__code", "id")


def stocks_in(*, user: User, project_id: int) -> QuerySet[StockRevision]:
    """The newest revision of each stock of a project, by code, with its author.

    Its content holds the recipe and the concentrations, so that no other row has to be read.
    """
    require_reader(user=user, project_id=project_id)
    newer = StockRevision.objects.filter(stock=OuterRef("stock"), number__gt=OuterRef("number"))
    found = StockRevision.objects.filter(~Exists(newer), stock__project_id=project_id)
    return found.select_related("stock", "created_by").order_by("stock__code", "id")


@dataclass(frozen=True)
class MaterialNames:
    """What can be charged in a project: names of compounds, codes of lots (with their compound) and of stocks."""

    compounds: tuple[str, ...] = ()
    lots: tuple[tuple[str, str], ...] = ()
    stocks: tuple[str, ...] = ()


def material_names(*, user: User, project_id: int) -> MaterialNames:
    """Names of all materials of a project, each kind in order, in one query."""
    require_reader(user=user, project_id=project_id)
    kinds = (
        (Compound, "compound", "name", Value("")),
        (Lot, "lot", "code", F("compound__name")),
        (Stock, "stock", "code", Value("")),
    )
    parts = [
        model.objects.filter(project_id=project_id).order_by().values_list(Value(kind), name, detail)
        for model, kind, name, detail in kinds
    ]
    rows = sorted(parts[0].union(*parts[1:], all=True))
    return MaterialNames(
        tuple(name for kind, name, _ in rows if kind == "compound"),
        tuple((code, compound) for kind, code, compound in rows if kind == "lot"),
        tuple(code for kind, code, _ in rows if kind == "stock"),
    )


def names_behind(*, user: User, project_id: int, digests: Collection[str]) -> dict[str, tuple[str, str]]:
    """What a stock's recipe was made from, by digest: ('lot', code) or ('compound', name)."""
    require_reader(user=user, project_id=project_id)
    compounds = CompoundRevision.objects.filter(compound__project_id=project_id, digest__in=digests)
    lots = LotRevision.objects.filter(lot__project_id=project_id, digest__in=digests)
    found = {digest: ("compound", name) for digest, name in compounds.values_list("digest", "compound__name")}
    found.update((digest, ("lot", code)) for digest, code in lots.values_list("digest", "lot__code"))
    return found


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


def compounds_called(*, user: User, text: str, project_id: int | None = None) -> QuerySet[Compound]:
    """Compounds whose name holds the text, of all projects that the person may see or of one, with the project."""
    found = Compound.objects.filter(project__in=projects_visible_to(user), name__icontains=text)
    found = found if project_id is None else found.filter(project_id=project_id)
    return found.select_related("project").order_by("name", "id")
