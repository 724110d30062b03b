"""From a dataset, a casting and a mechanism version to the engine's experiments and nuisance parameters."""

from __future__ import annotations

from collections.abc import Sequence
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
class DataOfFit:
    """What the data give to a fit before anything is chosen."""

    items: Sequence[DatasetItem]
    runs: Sequence[dict[str, Any]]  # run snapshots, in the order of the items
    tables: Sequence[Table]
    windows: Sequence[dict[str, Any]]

    @property
    def compounds(self) -> tuple[str, ...]:
        """Charged compounds, in order of first appearance."""
        return tuple(dict.fromkeys(c["compound"] for run in self.runs for c in run["start"]))

    @property
    def columns(self) -> tuple[str, ...]:
        """Columns that the windows leave in, in order of first appearance."""
        return tuple(
            dict.fromkeys(
                name
                for table, window in zip(self.tables, self.windows, strict=True)
                for name in table.names("concentration")
                if window["columns"] is None or name in window["columns"]
            )
        )


def data_of(dataset: Dataset) -> DataOfFit:
    """Read a dataset's runs and tables."""
    items = items_of(dataset)
    return DataOfFit(
        items=items,
        runs=[item.run_revision.content for item in items],
        tables=[item.table.table for item in items],
        windows=[entry["window"] for entry in dataset.content["items"]],
    )


def experiments_of(
    data: DataOfFit, casting: Casting, *, without_owners: Sequence[str] = ()
) -> tuple[list[Experiment], list[Nuisance]]:
    """The engine's experiments, and every nuisance parameter with a cause that is not left out.

    A nuisance parameter is named after its cause, so that all runs which share a stock solution or a
    standard share one unknown.
    """
    nuisances: dict[str, Nuisance] = {}

    def cause(name: str, owner: str, sd: float) -> tuple[str, ...]:
        if not sd > 0.0 or owner in without_owners:
            return ()
        known = nuisances.get(name)
        if known is None or known.sd < sd:  # revisions of one flask may differ: the wider uncertainty holds
            nuisances[name] = Nuisance(name=name, owner=owner, sd=sd)
        return (name,)

    experiments = []
    names = unique_names([item.run_revision.run.code for item in data.items])
    for item, name, run, table, window in zip(
        data.items, names, data.runs, data.tables, data.windows, strict=True
    ):
        charges = []
        for part in run["start"]:
            species = casting.compounds[part["compound"]]
            if species is None:
                continue
            owner = f"run {item.run_revision.run.code}"
            factors = cause(f"{owner}: {part['label']}", owner, part["own_relative_u"])
            for shared in part["run_shared"]:
                factors += cause(f"{owner}: {shared['owner']}", owner, shared["relative_u"])
            for shared in part["shared"]:
                factors += cause(shared["owner"], shared["owner"], shared["relative_u"])
            charges.append(Charge(species, part["concentration"], factors))
        columns = [
            c
            for c in table.names("concentration")
            if casting.columns.get(c) is not None and (window["columns"] is None or c in window["columns"])
        ]
        signal_factors: dict[str, tuple[str, ...]] = {}
        for error in item.table.content["scale_errors"]:
            for column in columns:
                if column in error["columns"]:
                    observable = str(casting.columns[column])
                    signal_factors[observable] = signal_factors.get(observable, ()) + cause(
                        error["owner"], error["owner"], error["relative_u"]
                    )
        keep, values, sigma = _points(table, columns, window)
        experiments.append(
            Experiment(
                name=name,
                charges=tuple(charges),
                times=table.times[keep],
                observed=tuple(str(casting.columns[c]) for c in columns),
                values=values,
                sigma=sigma,
                temperature=run["temperature"]["value"] if run["temperature"] else None,
                start_time=run["first_contact"],
                signal_factors=signal_factors,
                groups=groups_of(run),
            )
        )
    return experiments, list(nuisances.values())


def unique_names(codes: Sequence[str]) -> list[str]:
    """Run codes as experiment names; a run with several tables gets 'code (2)' and so on."""
    seen: dict[str, int] = {}
    names = []
    for code in codes:
        seen[code] = seen.get(code, 0) + 1
        names.append(code if seen[code] == 1 else f"{code} ({seen[code]})")
    return names


def groups_of(run: dict[str, Any]) -> dict[str, str]:
    """By what constants can be grouped: the set temperature."""
    if not run["temperature"]:
        return {}
    return {"temperature": f"{run['temperature']['value']:.2f} K"}


def _points(
    table: Table, columns: Sequence[str], window: dict[str, Any]
) -> tuple[NDArray[np.bool_], NDArray[np.float64], NDArray[np.float64] | None]:
    times = table.times
    keep = np.ones(times.size, dtype=bool)
    if window["start"] is not None:
        keep &= times >= window["start"]
    if window["end"] is not None:
        keep &= times <= window["end"]
    values = (
        np.stack([table.column(c, "concentration") for c in columns], axis=1)
        if columns
        else np.empty((times.size, 0))
    )
    values = values.copy()
    for place in window["left_out"]:
        column, _, row = place.rpartition("@")
        rows = slice(None) if row == "*" else int(row)
        if column == "*":
            values[rows, :] = np.nan
        elif column in columns:  # a column that plays no part has no points to leave out
            values[rows, list(columns).index(column)] = np.nan
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
