"""The same way from bytes to a fit's experiments as through the services, without a database.

What is read, reduced and put together here is read, reduced and put together by the same functions; only the
records between them are plain values.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from kinetics_db.demo.invented.exports import export_file
from kinetics_db.demo.invented.plan import Plan, PlannedRun, Truth
from kinetics_db.demo.invented.reality import Exported, what_happened
from kinetics_db.demo.invented.recipe import recipe_of, stated_noise
from kinetics_db.engine import amounts, calibration, reading
from kinetics_db.engine.fitting.problem import Experiment, Nuisance
from kinetics_db.engine.network import Network, parse_mechanism
from kinetics_db.engine.units import convert, to_stored
from kinetics_db.fits.casting import Casting, complete_casting
from kinetics_db.fits.experiments import DataOfFit, RunOfFit, experiments_of

EVERYTHING: dict[str, Any] = {"start": None, "end": None, "columns": None, "left_out": {}}


@dataclass(frozen=True)
class Problem:
    """What a global fit needs of the data and a mechanism."""

    network: Network
    experiments: list[Experiment]
    nuisances: list[Nuisance]


def problem_of(plan: Plan, truth: Truth, *, seed: int, mechanism: str) -> Problem:
    """Carry out a plan, write its files, read them again and pose a fit of a mechanism to all runs."""
    data = _data(plan, what_happened(plan, truth, seed))
    network = parse_mechanism(mechanism)
    casting = complete_casting(
        network, Casting({plan.standard: None}, {}), compounds=data.compounds, columns=data.columns
    )
    experiments, nuisances = experiments_of(data, casting)
    return Problem(network, experiments, nuisances)


def _data(plan: Plan, exports: list[Exported]) -> DataOfFit:
    runs = []
    for export in exports:
        run = _snapshot(plan, export.run)
        _, data = export_file(export)
        recipe = recipe_of(plan, export.run, run["start"], stated_noise(export.noise))
        reduced = calibration.reduce(reading.read(data).table, calibration.recipe_from_plain(recipe))
        scale_errors = [
            {"owner": e.owner, "relative_u": e.relative_u, "columns": list(e.columns)}
            for e in reduced.scale_errors
        ]
        runs.append(RunOfFit(export.run.code, run, reduced.table, scale_errors, EVERYTHING))
    return DataOfFit(runs)


def _lot(plan: Plan, code: str) -> amounts.Lot:
    bottle = plan.bottle(code)
    if bottle is None:
        raise KeyError(code)
    molar_mass = plan.substance(bottle.substance).molar_mass
    return amounts.Lot(f"lot {code}", bottle.substance, molar_mass, bottle.purity, bottle.purity_u)


def _stock(plan: Plan, code: str) -> amounts.Stock:
    solution = plan.solution(code)
    weighed, volume = solution.weighed, solution.volume
    lot = _lot(plan, solution.bottle)
    return amounts.stock_concentrations(
        amounts.StockRecipe(
            owner=f"stock {code}",
            components=(amounts.Charge(lot, weighed.value, weighed.unit, weighed.uncertainty),),
            volume=_litres(volume.value, volume.uncertainty, volume.unit),
        )
    )


def _litres(value: float, uncertainty: float, unit: str) -> amounts.TotalVolume:
    return amounts.TotalVolume(to_stored(value, unit, "volume"), to_stored(uncertainty, unit, "volume"))


def _snapshot(plan: Plan, run: PlannedRun) -> dict[str, Any]:
    """What a fit and a recipe read of a run's revision."""
    total = _litres(run.volume.value, run.volume.uncertainty, run.volume.unit)
    start = []
    for position, addition in enumerate(run.additions, start=1):
        source = (
            _lot(plan, addition.source) if plan.bottle(addition.source) else _stock(plan, addition.source)
        )
        amount = addition.amount
        charge = amounts.Charge(source, amount.value, amount.unit, amount.uncertainty)
        start += [
            {
                "label": f"charge {position}",
                "compound": part.compound,
                "concentration": part.concentration,
                "own_relative_u": part.own_relative_u,
                "shared": [{"owner": e.owner, "relative_u": e.relative_u} for e in part.shared],
                "run_shared": [{"owner": e.owner, "relative_u": e.relative_u} for e in part.run_shared],
            }
            for part in amounts.charge_contributions(charge, total, position)
        ]
    return {"start": start, "temperature": {"value": convert(run.celsius, "degC", "K")}, "first_contact": 0.0}
