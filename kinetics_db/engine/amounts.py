"""From what was weighed and pipetted to concentrations with the uncertainties of their causes.

Every path is a product or a quotient, so relative standard uncertainties add in quadrature (JCGM 100:2008,
5.1.6). Causes are kept apart: the weighing of this run is its own; a lot's purity or a stock's flask is
shared by every run that used it, and the run's volume by every compound of the run. A fit can then give each
cause one nuisance parameter instead of counting one error many times.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from kinetics_db.engine.units import kind_of_unit, to_stored
from kinetics_db.errors import InvalidInput, Problem

#: What is weighed or pipetted lies between these, in whatever unit; beyond them products would leave the floats.
SMALLEST, LARGEST = 1e-30, 1e30


class SharedError(NamedTuple):
    """A relative standard uncertainty that belongs to ``owner`` and moves all that came from it together."""

    owner: str
    relative_u: float


@dataclass(frozen=True)
class Lot:
    """One bottle of one compound.

    Attributes
    ----------
    owner : name under which the lot's errors are shared, such as 'lot 12'
    compound : name of the compound
    molar_mass : g/mol; needed for charges by mass or volume
    purity, purity_u : mass fraction, above 0 and at most 1, and its standard uncertainty
    density, density_u : g/L of the neat substance, and its standard uncertainty; needed for charges by volume
    """

    owner: str
    compound: str
    molar_mass: float | None = None
    purity: float = 1.0
    purity_u: float = 0.0
    density: float | None = None
    density_u: float = 0.0

    def __post_init__(self) -> None:
        problems = []
        if self.molar_mass is not None and not _positive(self.molar_mass):
            problems.append(
                Problem(f"molar mass {self.molar_mass}", field="molar_mass", cure="above 0 g/mol")
            )
        if not (_positive(self.purity) and self.purity <= 1):
            cure = "a mass fraction above 0 and at most 1; 98 % is 0.98"
            problems.append(Problem(f"purity {self.purity}", field="purity", cure=cure))
        if not _not_negative(self.purity_u):
            problems.append(Problem(f"uncertainty {self.purity_u}", field="purity_u", cure="0 or more"))
        problems += _problems_of_density(self.density, self.density_u)
        if problems:
            raise InvalidInput(problems)


@dataclass(frozen=True)
class StockConcentration:
    """One compound of a stock: mol/L, and the relative standard uncertainties by owner."""

    compound: str
    concentration: float
    shared: tuple[SharedError, ...] = ()


@dataclass(frozen=True)
class Stock:
    """A solution with known concentrations; made by `stock_concentrations` or stated directly.

    ``density`` (g/L) is needed only where the stock is weighed in.
    """

    owner: str
    components: tuple[StockConcentration, ...]
    density: float | None = None
    density_u: float = 0.0

    def __post_init__(self) -> None:
        problems = []
        if not self.components:
            problems.append(Problem(f"{self.owner} holds no compound", field="components"))
        for component in self.components:
            if not _not_negative(component.concentration):
                message = f"concentration {component.concentration} of {component.compound} in {self.owner}"
                problems.append(Problem(message, field="concentration", cure="0 mol/L or more"))
            if not all(_not_negative(e.relative_u) for e in component.shared):
                message = f"uncertainty of {component.compound} in {self.owner}"
                problems.append(Problem(message, field="shared", cure="0 or more"))
        problems += _problems_of_density(self.density, self.density_u)
        if problems:
            raise InvalidInput(problems)


@dataclass(frozen=True)
class Charge:
    """What was put in, as it was entered.

    Attributes
    ----------
    source : the lot or stock it came from
    value, unit : a mass, volume, amount, or (for a lot) the final concentration itself
    standard_uncertainty : of this one weighing or pipetting, in ``unit``
    """

    source: Lot | Stock
    value: float
    unit: str
    standard_uncertainty: float = 0.0

    def __post_init__(self) -> None:
        problems = []
        if not _not_negative(self.value):
            problems.append(Problem(f"charge of {self.value} {self.unit}", field="value", cure="0 or more"))
        if not _not_negative(self.standard_uncertainty):
            message = f"uncertainty {self.standard_uncertainty}"
            problems.append(Problem(message, field="standard_uncertainty", cure="0 or more"))
        elif self.value == 0 and self.standard_uncertainty > 0:
            message = "a charge of zero cannot have a relative uncertainty"
            problems.append(Problem(message, field="standard_uncertainty", cure="0, or leave the charge out"))
        if problems:
            raise InvalidInput(problems)

    @property
    def relative_u(self) -> float:
        return self.standard_uncertainty / self.value if self.value else 0.0


@dataclass(frozen=True)
class TotalVolume:
    """Volume of a run or a flask, L, and its standard uncertainty, L."""

    value: float
    standard_uncertainty: float = 0.0

    def __post_init__(self) -> None:
        if not _positive(self.value) or not _not_negative(self.standard_uncertainty):
            raise InvalidInput(
                f"volume {self.value} L +- {self.standard_uncertainty} L",
                field="total_volume",
                cure="a volume above 0 L and an uncertainty of 0 L or more",
            )

    @property
    def relative_u(self) -> float:
        return self.standard_uncertainty / self.value


@dataclass(frozen=True)
class StockRecipe:
    """What a stock was made from, and the volume it was made up to."""

    owner: str
    components: tuple[Charge, ...]
    volume: TotalVolume


@dataclass(frozen=True)
class Contribution:
    """What one charge, or all charges of one compound, bring into a run.

    Attributes
    ----------
    compound : name
    amount : mol
    concentration : mol/L in the run's volume
    own_relative_u : from this run's own weighing and pipetting of this compound alone
    shared : from lots and stocks, by owner; the same error in every run that used them
    run_shared : of this run, but common to several of its compounds: its 'volume', and 'charge 3' where the
        third charge is a stock of several compounds
    """

    compound: str
    amount: float
    concentration: float
    own_relative_u: float = 0.0
    shared: tuple[SharedError, ...] = ()
    run_shared: tuple[SharedError, ...] = ()

    @property
    def relative_u(self) -> float:
        """All causes together, in quadrature."""
        return math.hypot(self.own_relative_u, *(e.relative_u for e in self.shared + self.run_shared))


def charge_contributions(charge: Charge, volume: TotalVolume, position: int = 1) -> tuple[Contribution, ...]:
    """What one charge brings: one contribution for a lot, one for each compound of a stock.

    ``position`` is the charge's place in the order of addition; it names the error of a stock's pipetting.

    Raises
    ------
    InvalidInput
        when the unit is of no usable kind, or the molar mass or density that it needs is missing.
    """
    kind = kind_of_unit(charge.unit)
    if isinstance(charge.source, Stock):
        return _from_stock(charge, charge.source, kind, volume, position)
    return (_from_lot(charge, charge.source, kind, volume),)


def run_concentrations(charges: Iterable[Charge], volume: TotalVolume) -> tuple[Contribution, ...]:
    """Initial concentrations of a run, one contribution per compound in the order of first addition.

    Charges of one compound add up: their own errors in quadrature, those of one owner linearly, since an
    owner's error moves all that came from it in the same direction.
    """
    parts: dict[str, list[Contribution]] = {}
    for position, charge in enumerate(charges, start=1):
        for part in charge_contributions(charge, volume, position):
            parts.setdefault(part.compound, []).append(part)
    return tuple(_sum(compound, of_compound) for compound, of_compound in parts.items())


def stock_concentrations(recipe: StockRecipe) -> Stock:
    """Concentrations of a stock from its recipe.

    The weighing of each compound and the flask's volume become errors of the stock, shared by all that is
    drawn from it; those of lots and of stocks that it was diluted from stay with these.
    """
    components = []
    for total in run_concentrations(recipe.components, recipe.volume):
        shared = _errors(
            SharedError(f"{recipe.owner} {total.compound}", total.own_relative_u),
            *(SharedError(f"{recipe.owner} {e.owner}", e.relative_u) for e in total.run_shared),
            *total.shared,
        )
        components.append(StockConcentration(total.compound, total.concentration, shared))
    return Stock(recipe.owner, tuple(components))


def _from_lot(charge: Charge, lot: Lot, kind: str, volume: TotalVolume) -> Contribution:
    shared = [SharedError(f"{lot.owner} purity", lot.purity_u / lot.purity)]
    run_shared = _errors(SharedError("volume", volume.relative_u))
    if kind == "concentration":  # a final concentration, whatever it was made from
        concentration = to_stored(charge.value, charge.unit, "concentration")
        amount, shared, run_shared = concentration * volume.value, [], ()
    elif kind == "amount":  # an amount is that of the compound itself: purity is already in it
        amount, shared = to_stored(charge.value, charge.unit, "amount"), []
        concentration = amount / volume.value
    elif kind in ("mass", "volume"):
        mass = to_stored(charge.value, charge.unit, kind)
        if kind == "volume":
            density = _needed(lot.density, "density", lot)
            mass *= density
            shared.append(SharedError(f"{lot.owner} density", lot.density_u / density))
        amount = mass * lot.purity / _needed(lot.molar_mass, "molar_mass", lot)
        concentration = amount / volume.value
    else:
        raise _wrong_kind(charge, "a mass, volume, amount or concentration")
    return Contribution(lot.compound, amount, concentration, charge.relative_u, _errors(*shared), run_shared)


def _from_stock(
    charge: Charge, stock: Stock, kind: str, volume: TotalVolume, position: int
) -> tuple[Contribution, ...]:
    added: tuple[SharedError, ...] = ()
    if kind == "volume":
        litres = to_stored(charge.value, charge.unit, "volume")
    elif kind == "mass":
        density = _needed(stock.density, "density", stock)
        litres = to_stored(charge.value, charge.unit, "mass") / density
        added = _errors(SharedError(f"{stock.owner} density", stock.density_u / density))
    else:
        raise _wrong_kind(charge, "a volume or mass of the stock")
    alone = len(stock.components) == 1
    pipetting = SharedError(f"charge {position}", 0.0 if alone else charge.relative_u)
    return tuple(
        Contribution(
            component.compound,
            component.concentration * litres,
            component.concentration * litres / volume.value,
            charge.relative_u if alone else 0.0,
            component.shared + added,
            _errors(SharedError("volume", volume.relative_u), pipetting),
        )
        for component in stock.components
    )


def _sum(compound: str, parts: Sequence[Contribution]) -> Contribution:
    if len(parts) == 1:
        return parts[0]
    concentration = math.fsum(p.concentration for p in parts)
    amount = math.fsum(p.amount for p in parts)
    if concentration == 0:
        return Contribution(compound, 0.0, 0.0)
    weights = [p.concentration / concentration for p in parts]
    return Contribution(
        compound,
        amount,
        concentration,
        math.hypot(*(w * p.own_relative_u for w, p in zip(weights, parts, strict=True))),
        _weighted([(w, p.shared) for w, p in zip(weights, parts, strict=True)]),
        _weighted([(w, p.run_shared) for w, p in zip(weights, parts, strict=True)]),
    )


def _weighted(parts: Sequence[tuple[float, tuple[SharedError, ...]]]) -> tuple[SharedError, ...]:
    by_owner: dict[str, float] = {}
    for weight, errors in parts:
        for error in errors:
            by_owner[error.owner] = by_owner.get(error.owner, 0.0) + weight * error.relative_u
    return tuple(SharedError(owner, u) for owner, u in by_owner.items())


def _errors(*errors: SharedError) -> tuple[SharedError, ...]:
    return tuple(e for e in errors if e.relative_u > 0)


def _needed(value: float | None, field: str, source: Lot | Stock) -> float:
    if value is None:
        name = field.replace("_", " ")
        raise InvalidInput(
            f"the {name} of {source.owner} is not known",
            field=field,
            cure=f"give its {name}, or charge it by amount or concentration",
        )
    return value


def _problems_of_density(density: float | None, density_u: float) -> Iterator[Problem]:
    if density is not None and not _positive(density):
        yield Problem(f"density {density}", field="density", cure="above 0 g/L")
    if not _not_negative(density_u):
        yield Problem(f"uncertainty {density_u}", field="density_u", cure="0 or more")


def _wrong_kind(charge: Charge, accepted: str) -> InvalidInput:
    return InvalidInput(f"a charge in '{charge.unit}' cannot be used here", field="unit", cure=accepted)


def _positive(value: object) -> bool:
    return _number(value) and SMALLEST <= value <= LARGEST  # type: ignore[operator]


def _not_negative(value: object) -> bool:
    return _number(value) and (value == 0 or SMALLEST <= value <= LARGEST)  # type: ignore[operator]


def _number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
