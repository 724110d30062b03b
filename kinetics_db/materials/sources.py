"""From stored materials to the engine's lots and stocks, and a stock's content."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from kinetics_db.engine import amounts
from kinetics_db.materials.models import CompoundRevision, LotRevision, MaterialRevision, StockRevision


@dataclass(frozen=True)
class Source:
    """Where a charge came from: a compound (with its lot, where one is named) or a stock."""

    compound: CompoundRevision | None = None
    lot: LotRevision | None = None
    stock: StockRevision | None = None

    @property
    def records(self) -> list[MaterialRevision]:
        """The records behind it."""
        return [part for part in (self.compound, self.lot, self.stock) if part is not None]

    def for_engine(self) -> amounts.Lot | amounts.Stock:
        """As the engine reads it."""
        if self.stock is not None:
            return engine_stock(self.stock)
        assert self.compound is not None, "a source is a compound or a stock"
        return engine_lot(self.compound, self.lot)


def engine_lot(of: CompoundRevision, lot: LotRevision | None) -> amounts.Lot:
    """A lot, or the pure compound where no lot is named, as a source of charges."""
    about = of.content
    known = lot.content if lot is not None else {"purity": 1.0, "purity_u": 0.0}
    return amounts.Lot(
        owner=f"lot {lot.lot.code}" if lot is not None else f"compound {about['name']}",
        compound=about["name"],
        molar_mass=about["molar_mass"],
        purity=known["purity"],
        purity_u=known["purity_u"],
        density=about["density"],
    )


def engine_stock(revision: StockRevision) -> amounts.Stock:
    """A stock as a source of charges."""
    content = revision.content
    return amounts.Stock(
        owner=f"stock {content['code']}",
        components=tuple(
            amounts.StockConcentration(
                part["compound"],
                part["concentration"],
                tuple(amounts.SharedError(e["owner"], e["relative_u"]) for e in part["shared"]),
            )
            for part in content["components"]
        ),
    )


def stock_content(
    *,
    code: str,
    recipe: amounts.StockRecipe,
    made_up: amounts.Stock,
    portions: Sequence[Any],
    resolved: Sequence[tuple[CompoundRevision, LotRevision | None]],
    solvent: str,
    made_on: str,
    temperature: float | None,
) -> dict[str, Any]:
    """The plain values of a stock: recipe as entered, resolved parents by digest, concentrations in mol/L."""
    return {
        "format": "ratewright/stock/1",
        "code": code,
        "solvent": solvent,
        "made_on": made_on,
        "temperature": temperature,
        "volume": {"value": recipe.volume.value, "u": recipe.volume.standard_uncertainty, "unit": "L"},
        "portions": [
            {
                "compound": of.digest,
                "lot": lot.digest if lot is not None else None,
                "value": portion.value,
                "unit": portion.unit,
                "u": portion.uncertainty,
            }
            for portion, (of, lot) in zip(portions, resolved, strict=True)
        ],
        "components": [
            {
                "compound": part.compound,
                "concentration": part.concentration,
                "shared": [{"owner": e.owner, "relative_u": e.relative_u} for e in part.shared],
            }
            for part in made_up.components
        ],
    }
