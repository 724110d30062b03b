"""What really happened in an invented laboratory: errors nobody knows, the reaction, and the noise.

Written without the code that reads runs and files, in plain arithmetic, so that a fit of what comes out tests
that code. Each balance, flask and pipette errs once where it is used; what is drawn from one solution shares
the solution's error.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kinetics_db.demo.invented.plan import Plan, PlannedRun, Truth
from kinetics_db.engine import Conditions, parse_mechanism, simulate
from kinetics_db.runs.entry import Amount

LITRES = {"L": 1.0, "mL": 1e-3, "uL": 1e-6}
GRAMS = {"g": 1.0, "mg": 1e-3}


@dataclass(frozen=True, eq=False)
class Exported:
    """What the instrument has of one run.

    Attributes
    ----------
    times : ndarray, shape (n,), s
    columns : length m
    integrals : ndarray, shape (n, m), a.u.; NaN where a cell is missing
    noise : standard deviation of an integral, a.u.
    """

    run: PlannedRun
    times: NDArray[np.float64]
    columns: tuple[str, ...]
    integrals: NDArray[np.float64]
    noise: float


def what_happened(plan: Plan, truth: Truth, seed: int) -> list[Exported]:
    """Carry out a plan: true weighings and volumes, true curves, noisy integrals. The seed decides it all."""
    random = np.random.default_rng(seed)
    purity = {b.code: b.purity + b.purity_u * random.standard_normal() for b in plan.bottles}
    molarity = {}
    for solution in plan.solutions:
        mass = _truly(solution.weighed, GRAMS, random)
        molar_mass = plan.substance(plan.substance_of(solution.code)).molar_mass
        litres = _truly(solution.volume, LITRES, random)
        molarity[solution.code] = mass * purity[solution.bottle] / molar_mass / litres
    return [_carry_out(plan, truth, run, purity, molarity, random) for run in plan.runs]


def _carry_out(
    plan: Plan,
    truth: Truth,
    run: PlannedRun,
    purity: Mapping[str, float],
    molarity: Mapping[str, float],
    random: np.random.Generator,
) -> Exported:
    moles: dict[str, float] = {}
    for addition in run.additions:
        name = plan.substance_of(addition.source)
        if plan.bottle(addition.source) is not None:
            grams = _truly(addition.amount, GRAMS, random)
            amount = grams * purity[addition.source] / plan.substance(name).molar_mass
        else:
            amount = _truly(addition.amount, LITRES, random) * molarity[addition.source]
        moles[name] = moles.get(name, 0.0) + amount
    litres = _truly(run.volume, LITRES, random)
    network = parse_mechanism(truth.mechanism)
    curves = simulate(
        network,
        constants=truth.constants[run.celsius],
        start={name: n / litres for name, n in moles.items() if name in network.species},
        times=run.times,
        conditions=Conditions(temperature=run.celsius + 273.15),
    )
    if not curves.outcome.ok:
        raise RuntimeError(f"the truth of run {run.code} cannot be computed: {curves.outcome.message}")
    clean = np.stack(
        [
            nuclei
            * (np.full(len(run.times), moles[name] / litres) if name == plan.standard else curves.of(name))
            for name, nuclei in plan.nuclei.items()
        ],
        axis=1,
    )
    integrals = run.gain * (clean + plan.noise * random.standard_normal(clean.shape))
    columns = tuple(plan.nuclei)
    for row, column in run.missing:
        integrals[row, columns.index(column)] = np.nan
    return Exported(run, np.array(run.times), columns, integrals, run.gain * plan.noise)


def _truly(amount: Amount, units: Mapping[str, float], random: np.random.Generator) -> float:
    """The true value behind a stated one, in g or L."""
    return (amount.value + amount.uncertainty * float(random.standard_normal())) * units[amount.unit]
