"""Entering compounds, lots and stocks. Entering a name again makes its next revision."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import date
from typing import Any, TypeVar

from django.db.models import QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.engine import amounts
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.engine.units import convert
from kinetics_db.errors import InvalidInput, NotFound, Problem
from kinetics_db.materials.models import (
    Compound,
    CompoundRevision,
    Lot,
    LotRevision,
    MaterialRevision,
    Stock,
    StockComponent,
    StockRevision,
)
from kinetics_db.materials.selectors import compound_named, lot_named
from kinetics_db.materials.sources import engine_lot, stock_content
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import note_write, recording, save_record

MOST_CONCENTRATED = 1e3
"""mol/L; nothing is as dense, and the database holds no more."""

Revision = TypeVar("Revision", bound=MaterialRevision)


@dataclass(frozen=True)
class Portion:
    """What goes into a stock: a lot (by code) or a compound (by name), an amount in any unit, its uncertainty."""

    value: float
    unit: str
    lot: str | None = None
    compound: str | None = None
    uncertainty: float = 0.0


def enter_compound(
    *,
    user: User,
    project_id: int,
    name: str,
    formula: str = "",
    molar_mass: float | None = None,
    density: tuple[float, str] | None = None,
    hazard_statements: Sequence[str] = (),
    reason: str = "",
) -> CompoundRevision:
    """Enter a compound: molar mass in g/mol, density with its unit, GHS hazard statements (H codes)."""
    require_contributor(user=user, project_id=project_id)
    name = plain_text(name, field="name", what="a compound", longest=80, required=True)
    formula = plain_text(formula, field="formula", longest=200)
    reason = plain_text(reason, field="reason")
    hazards = [plain_text(h, field="hazard_statements", longest=200) for h in hazard_statements]
    _positive(molar_mass, "molar_mass", "g/mol")
    content = {
        "format": "ratewright/compound/1",
        "name": name,
        "formula": formula,
        "molar_mass": molar_mass,
        "density": None if density is None else float(convert(density[0], density[1], "g/L")),
        "hazard_statements": hazards,
    }
    _positive(content["density"], "density", "g/L")  # type: ignore[arg-type]
    with recording(user=user):
        lock_project(project_id)
        compound, made = Compound.objects.get_or_create(project_id=project_id, name=name)
        _note_if(made, "compound", compound.pk, project_id, name)
        return _next_revision(
            CompoundRevision(compound=compound),
            CompoundRevision.objects.filter(compound=compound),
            user=user,
            content=content,
            project_id=project_id,
            label=name,
            reason=reason,
        )


def enter_lot(
    *,
    user: User,
    project_id: int,
    code: str,
    compound: str,
    purity: float = 1.0,
    purity_uncertainty: float = 0.0,
    supplier_note: str = "",
    reason: str = "",
) -> LotRevision:
    """Enter a bottle: purity as a mass fraction with its standard uncertainty."""
    require_contributor(user=user, project_id=project_id)
    code = plain_text(code, field="code", what="a lot", longest=80, required=True)
    compound = plain_text(compound, field="compound", longest=80)
    supplier_note = plain_text(supplier_note, field="supplier_note", lines=True)
    reason = plain_text(reason, field="reason")
    with recording(user=user):
        lock_project(project_id)
        of = _compound(project_id, compound)
        amounts.Lot(code, compound, purity=purity, purity_u=purity_uncertainty)  # checks the numbers
        lot, made = Lot.objects.get_or_create(
            project_id=project_id, code=code, defaults={"compound": of.compound}
        )
        if lot.compound_id != of.compound_id:
            raise InvalidInput(
                f"lot '{code}' is of '{lot.compound}'",
                field="compound",
                cure="another code for another compound",
            )
        _note_if(made, "lot", lot.pk, project_id, code)
        content = {
            "format": "ratewright/lot/1",
            "code": code,
            "compound": of.digest,
            "purity": purity,
            "purity_u": purity_uncertainty,
            "supplier_note": supplier_note,
        }
        return _next_revision(
            LotRevision(lot=lot, compound_revision=of),
            LotRevision.objects.filter(lot=lot),
            user=user,
            content=content,
            project_id=project_id,
            label=code,
            reason=reason,
            parents=[of],
        )


def make_up_stock(
    *,
    user: User,
    project_id: int,
    code: str,
    portions: Sequence[Portion],
    volume: tuple[float, str],
    volume_uncertainty: float = 0.0,
    solvent: str = "",
    made_on: str = "",
    temperature: float | None = None,
    reason: str = "",
) -> StockRevision:
    """Make up a stock solution from lots or compounds to a volume (with its unit and standard uncertainty).

    ``made_on`` is an ISO date, ``temperature`` the make-up temperature in K.
    """
    require_contributor(user=user, project_id=project_id)
    code = plain_text(code, field="code", what="a stock", longest=80, required=True)
    solvent = plain_text(solvent, field="solvent", longest=200)
    made_on = plain_text(made_on, field="made_on", longest=40)
    reason = plain_text(reason, field="reason")
    _check_stock(made_on, temperature, portions)
    with recording(user=user):
        lock_project(project_id)
        stock, made = Stock.objects.get_or_create(project_id=project_id, code=code)
        _note_if(made, "stock", stock.pk, project_id, code)
        resolved, recipe = _recipe(project_id, code, portions, volume, volume_uncertainty)
        made_up = amounts.stock_concentrations(recipe)
        _check_concentrations(made_up)
        content = stock_content(
            code=code,
            recipe=recipe,
            made_up=made_up,
            portions=portions,
            resolved=resolved,
            solvent=solvent,
            made_on=made_on,
            temperature=temperature,
        )
        parents = [part for pair in resolved for part in pair if part is not None]
        revision = _next_revision(
            StockRevision(stock=stock),
            StockRevision.objects.filter(stock=stock),
            user=user,
            content=content,
            project_id=project_id,
            label=code,
            reason=reason,
            parents=parents,
        )
        if not revision.components.exists():
            by_name = {of.compound.name: (of, lot) for of, lot in resolved}
            StockComponent.objects.bulk_create(
                StockComponent(
                    revision=revision,
                    compound_revision=by_name[part.compound][0],
                    lot_revision=by_name[part.compound][1],
                    concentration=part.concentration,
                )
                for part in made_up.components
            )
    return revision


def _check_stock(made_on: str, temperature: float | None, portions: Sequence[Portion]) -> None:
    problems: list[Problem] = []
    if not portions:
        cure = "at least one lot or compound"
        problems.append(Problem("the stock holds nothing", field="portions", cure=cure))
    with _placed(problems, ""):
        _positive(temperature, "temperature", "K")
    try:
        if made_on:
            date.fromisoformat(made_on)
    except ValueError:
        problems.append(Problem(f"'{made_on}' is no date", field="made_on", cure="for example 2026-03-05"))
    if problems:
        raise InvalidInput(problems)


def _recipe(
    project_id: int,
    code: str,
    portions: Sequence[Portion],
    volume: tuple[float, str],
    volume_uncertainty: float,
) -> tuple[list[tuple[CompoundRevision, LotRevision | None]], amounts.StockRecipe]:
    """What the portions are of, and the recipe; problems have places such as 'portions.2.unit'."""
    problems: list[Problem] = []
    resolved, charges = [], []
    total = amounts.TotalVolume(1.0)
    with _placed(problems, "volume"):
        litres = float(convert(volume[0], volume[1], "L"))
        total = amounts.TotalVolume(litres, float(convert(volume_uncertainty, volume[1], "L")))
    for position, portion in enumerate(portions, start=1):
        with _placed(problems, f"portions.{position}"):
            of, lot = _resolve(project_id, portion)
            charge = amounts.Charge(engine_lot(of, lot), portion.value, portion.unit, portion.uncertainty)
            amounts.charge_contributions(charge, total, position)
            resolved.append((of, lot))
            charges.append(charge)
    if problems:
        raise InvalidInput(problems)
    return resolved, amounts.StockRecipe(owner=f"stock {code}", components=tuple(charges), volume=total)


def _check_concentrations(made_up: amounts.Stock) -> None:
    for part in made_up.components:
        if part.concentration > MOST_CONCENTRATED:
            raise InvalidInput(
                f"{part.compound} would be {part.concentration:.3g} mol/L",
                field="portions",
                cure=f"amounts and a volume that give at most {MOST_CONCENTRATED:g} mol/L",
            )


@contextmanager
def _placed(problems: list[Problem], where: str) -> Iterator[None]:
    """Collect what a block refuses, under a place."""
    try:
        yield
    except InvalidInput as error:
        for problem in error.problems:
            place = ".".join(part for part in (where, problem.field) if part)
            problems.append(replace(problem, field=place))


def _compound(project_id: int, name: str) -> CompoundRevision:
    try:
        return compound_named(project_id=project_id, name=name)
    except NotFound as error:
        raise InvalidInput(str(error), field="compound", cure="a compound that is entered") from error


def _resolve(project_id: int, portion: Portion) -> tuple[CompoundRevision, LotRevision | None]:
    if (portion.lot is None) == (portion.compound is None):
        raise InvalidInput("a portion needs a lot or a compound", cure="exactly one of both")
    try:
        if portion.lot is not None:
            lot = lot_named(project_id=project_id, code=plain_text(portion.lot, field="lot", longest=80))
            return lot.compound_revision, lot
        name = plain_text(portion.compound, field="compound", longest=80)
        return compound_named(project_id=project_id, name=name), None
    except NotFound as error:
        field = "lot" if portion.lot is not None else "compound"
        raise InvalidInput(str(error), field=field, cure="enter it first, or correct the name") from error


def _next_revision(
    revision: Revision,
    earlier: QuerySet[Revision],
    *,
    user: User,
    content: dict[str, Any],
    project_id: int,
    label: str,
    reason: str,
    parents: Sequence[MaterialRevision] = (),
) -> Revision:
    """Store the next revision of a material, or give back the newest one when nothing has changed."""
    latest = earlier.order_by("-number").first()
    if latest is not None and latest.digest == digest(content):
        return latest
    revision.number = (latest.number if latest else 0) + 1
    revision.reason = reason
    return save_record(
        revision,
        user=user,
        content=content,
        parents=[*parents, *([latest] if latest else [])],
        project_id=project_id,
        label=f"{label} r{revision.number}",
        verb="revised" if latest else "entered",
        reason=reason,
        digest_before=latest.digest if latest else "",
    )


def _note_if(made: bool, kind: str, pk: int, project_id: int, label: str) -> None:
    if made:
        note_write(verb="made", record_kind=kind, record_id=pk, project_id=project_id, label=label)


def _positive(value: float | None, field: str, unit: str) -> None:
    if value is not None and not (isinstance(value, int | float) and math.isfinite(value) and value > 0):
        raise InvalidInput(f"{field.replace('_', ' ')} {value}", field=field, cure=f"above 0 {unit}")
