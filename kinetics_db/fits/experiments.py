"""From a dataset, a casting and a mechanism version to the engine's experiments and nuisance parameters."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kinetics_db.datasets.models import Dataset, DatasetItem
from kinetics_db.datasets.selectors import items_of
from kinetics_db.engine.fitting.problem import Charge, Experiment, Nuisance
from kinetics_db.engine.tables import Table
from kinetics_db.fits.casting import Casting


@dataclass(frozen=True)
class RunOfFit:
    """One table of a run as a fit reads it: the run's snapshot, the numbers, their common errors, what counts."""

    code: str
    snapshot: Mapping[str, Any]
    table: Table
    scale_errors: Sequence[Mapping[str, Any]]
    window: Mapping[str, Any]

    @property
    def owner(self) -> str:
        """Whose the errors are that belong to this run alone."""
        return f"run {self.code}"

    @property
    def columns(self) -> tuple[str, ...]:
        """Columns that the window leaves in."""
        chosen = self.window["columns"]
        return tuple(c for c in self.table.names("concentration") if chosen is None or c in chosen)


@dataclass(frozen=True)
class DataOfFit:
    """What the data give to a fit before anything is chosen; ``items`` are the records they stand in."""

    runs: Sequence[RunOfFit]
    items: Sequence[DatasetItem] = ()

    @property
    def names(self) -> list[str]:
        """Names of the experiments: run codes; a run with several tables gets 'code (2)' and so on."""
        seen: dict[str, int] = {}
        names = []
        for run in self.runs:
            seen[run.code] = seen.get(run.code, 0) + 1
            names.append(run.code if seen[run.code] == 1 else f"{run.code} ({seen[run.code]})")
        return names

    @property
    def compounds(self) -> tuple[str, ...]:
        """Charged compounds, in order of first appearance."""
        return tuple(dict.fromkeys(c["compound"] for run in self.runs for c in run.snapshot["start"]))

    @property
    def columns(self) -> tuple[str, ...]:
        """Columns that the windows leave in, in order of first appearance."""
        return tuple(dict.fromkeys(name for run in self.runs for name in run.columns))


def data_of(dataset: Dataset) -> DataOfFit:
    """Read a dataset's runs and tables."""
    items = items_of(dataset)
    windows = [entry["window"] for entry in dataset.content["items"]]
    return DataOfFit(
        runs=[
            RunOfFit(
                code=item.run_revision.run.code,
                snapshot=item.run_revision.content,
                table=item.table.table,
                scale_errors=item.table.content["scale_errors"],
                window=window,
            )
            for item, window in zip(items, windows, strict=True)
        ],
        items=items,
    )


class _Causes:
    """Nuisance parameters by name: one for each physical cause, however many runs share it."""

    def __init__(self, without_owners: Sequence[str]):
        self.found: dict[str, Nuisance] = {}
        self._without = frozenset(without_owners)

    def named(self, name: str, owner: str, sd: float) -> tuple[str, ...]:
        """The factor's name as a tuple, empty when there is no error or its owner is left out."""
        if not sd > 0.0 or owner in self._without:
            return ()
        known = self.found.get(name)
        if known is None or known.sd < sd:  # revisions of one flask may differ: the wider uncertainty holds
            self.found[name] = Nuisance(name=name, owner=owner, sd=sd)
        return (name,)


def experiments_of(
    data: DataOfFit, casting: Casting, *, without_owners: Sequence[str] = ()
) -> tuple[list[Experiment], list[Nuisance]]:
    """The engine's experiments, and every nuisance parameter with a cause that is not left out.

    A nuisance parameter is named after its cause, so that all runs which share a stock solution or a
    standard share one unknown.
    """
    causes = _Causes(without_owners)
    experiments = [
        _experiment(name, run, casting, causes) for name, run in zip(data.names, data.runs, strict=True)
    ]
    return experiments, list(causes.found.values())


def _experiment(name: str, run: RunOfFit, casting: Casting, causes: _Causes) -> Experiment:
    columns = [c for c in run.columns if casting.columns.get(c) is not None]
    keep, values, sigma = _points(run, columns)
    temperature = run.snapshot["temperature"]
    return Experiment(
        name=name,
        charges=_charges(run, casting, causes),
        times=run.table.times[keep],
        observed=tuple(str(casting.columns[c]) for c in columns),
        values=values,
        sigma=sigma,
        temperature=temperature["value"] if temperature else None,
        start_time=run.snapshot["first_contact"],
        signal_factors=_signal_factors(run, columns, casting, causes),
        groups=groups_of(run.snapshot),
        owner=run.owner,
    )


def _charges(run: RunOfFit, casting: Casting, causes: _Causes) -> tuple[Charge, ...]:
    charges = []
    for part in run.snapshot["start"]:
        species = casting.compounds[part["compound"]]
        if species is None:
            continue
        factors = causes.named(f"{run.owner}: {part['label']}", run.owner, part["own_relative_u"])
        for error in part["run_shared"]:
            factors += causes.named(f"{run.owner}: {error['owner']}", run.owner, error["relative_u"])
        for error in part["shared"]:
            factors += causes.named(error["owner"], error["owner"], error["relative_u"])
        charges.append(Charge(species, part["concentration"], factors))
    return tuple(charges)


def _signal_factors(
    run: RunOfFit, columns: Sequence[str], casting: Casting, causes: _Causes
) -> dict[str, tuple[str, ...]]:
    factors: dict[str, tuple[str, ...]] = {}
    for error in run.scale_errors:
        for column in columns:
            if column in error["columns"]:
                observable = str(casting.columns[column])
                named = causes.named(error["owner"], error["owner"], error["relative_u"])
                factors[observable] = factors.get(observable, ()) + named
    return factors


def groups_of(snapshot: Mapping[str, Any]) -> dict[str, str]:
    """By what constants can be grouped: the set temperature."""
    if not snapshot["temperature"]:
        return {}
    return {"temperature": f"{snapshot['temperature']['value']:.2f} K"}


def rows_in_window(run: RunOfFit) -> NDArray[np.bool_]:
    """Rows of a run's table whose time the dataset chooses, shape (n,)."""
    times, window = run.table.times, run.window
    first = -np.inf if window["start"] is None else window["start"]
    last = np.inf if window["end"] is None else window["end"]
    return np.asarray((times >= first) & (times <= last))


def reason_left_out(run: RunOfFit, column: str, row: int) -> str:
    """Why the dataset leaves a point out; empty when it counts."""
    left_out = run.window["left_out"]
    for place in (f"{column}@{row}", f"{column}@*", f"*@{row}", "*@*"):
        if place in left_out:
            return str(left_out[place])
    return ""


def _points(
    run: RunOfFit, columns: Sequence[str]
) -> tuple[NDArray[np.bool_], NDArray[np.float64], NDArray[np.float64] | None]:
    """Rows that count, and values and standard uncertainties of these rows, shape (n, m) each."""
    table, keep = run.table, rows_in_window(run)
    values = np.empty((table.rows, len(columns)))
    for i, column in enumerate(columns):
        values[:, i] = table.column(column, "concentration")
    if run.window["left_out"]:
        for i, column in enumerate(columns):
            out = [row for row in range(table.rows) if reason_left_out(run, column, row)]
            values[out, i] = np.nan
    tabulated = table.names("standard uncertainty")
    sigma = None
    if columns and all(c in tabulated for c in columns):
        sigma = np.stack([table.column(c, "standard uncertainty") for c in columns], axis=1)
        if not np.isfinite(sigma[np.isfinite(values)]).any():
            sigma = None  # none is stated: the fit has to estimate it
    in_percent = np.array([100.0 if _unit(table, c) == "1" else 1.0 for c in columns])
    return keep, values[keep] * in_percent, None if sigma is None else sigma[keep] * in_percent


def _unit(table: Table, column: str) -> str:
    """Fractions are fitted as percent, as charges of relative runs are kept."""
    return table.columns[table.index(column, "concentration")].unit
