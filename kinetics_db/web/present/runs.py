"""Runs as the project page shows them: conditions, plots, where they come from."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from django.utils.safestring import SafeString

from kinetics_db.engine.tables import Table
from kinetics_db.runs.selectors import start_concentrations
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.plots import Plot, Series, draw
from kinetics_db.web.present.units import ZERO_CELSIUS, Units, factor, units_for

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable
    from kinetics_db.runs.models import RunRevision


@dataclass(frozen=True)
class Curve:
    """A model's values for one table: by column, over times in s, in the table's unit."""

    times: np.ndarray
    columns: Mapping[str, np.ndarray]


@dataclass(frozen=True)
class FigureSheet:
    """A table's plot and what the table was made from."""

    svg: SafeString
    table: ConcentrationTable


@dataclass(frozen=True)
class RunSheet:
    """One run."""

    code: str
    anchor: str
    revision: RunRevision
    temperature: Shown | None
    concentrations: Sequence[tuple[str, Shown]]
    words: Sequence[str]
    notes: str
    figures: Sequence[FigureSheet]


def units_of(revisions: Iterable[RunRevision], tables: Sequence[tuple[ConcentrationTable, Table]]) -> Units:
    """Units after the largest measured value and the longest table, or the charges where nothing is measured."""
    measured = [
        float(np.nanmax(values))
        for record, table in tables
        if record.basis == "mol/L"
        for name in table.names("concentration")
        if np.isfinite(values := table.column(name, "concentration")).any()
    ]
    charged = (
        part["concentration"]
        for revision in revisions
        if (content := revision.content)["basis"] == "mol/L"
        for part in content["start"]
    )
    durations = [record.last_time for record, _ in tables if record.last_time is not None]
    return units_for(concentrations=measured or charged, durations=durations)


def run_sheets(
    revisions: Iterable[RunRevision],
    tables: Sequence[tuple[ConcentrationTable, Table]],
    curves: Mapping[int, Curve],
    *,
    units: Units,
    model_name: str,
) -> list[RunSheet]:
    """Every run with its tables' plots; ``curves`` is by table id."""
    names = (name for _, table in tables for name in table.names("concentration"))
    positions = {name: i for i, name in enumerate(dict.fromkeys(names))}
    by_run: dict[int, list[FigureSheet]] = {}
    for record, table in tables:
        drawn = _figure(record, table, curves.get(record.pk), positions, units, model_name)
        by_run.setdefault(record.run_id, []).append(FigureSheet(drawn, record))
    return [_sheet(revision, by_run.get(revision.run_id, []), units) for revision in revisions]


def anchor_of(run_id: int) -> str:
    """The name by which a run's place on the page can be linked to."""
    return f"run-{run_id}"


def temperature_of(content: Mapping[str, Any]) -> Shown | None:
    """The set temperature in degC, the way a bench writes it; copying gives K."""
    found = content["temperature"]
    if not found:
        return None
    kelvin, spread = found["value"], found.get("u") or 0.0
    reading = shown(round(kelvin - ZERO_CELSIUS, 6), spread, "°C", digits=5)
    return Shown(reading.text, f"{kelvin!r} K", repr(kelvin))


def _sheet(revision: RunRevision, figures: Sequence[FigureSheet], units: Units) -> RunSheet:
    content = revision.content
    unit = units.concentration_of(content["basis"])
    scale = factor("mol/L", unit) if content["basis"] == "mol/L" else 1.0
    return RunSheet(
        code=revision.run.code,
        anchor=anchor_of(revision.run_id),
        revision=revision,
        temperature=temperature_of(content),
        concentrations=[
            (part.compound, shown(part.value * scale, part.standard_uncertainty * scale, unit))
            for part in start_concentrations(revision)
        ],
        words=_words(content),
        notes=content["notes"],
        figures=figures,
    )


def _words(content: Mapping[str, Any]) -> list[str]:
    words = []
    if content["control_kind"]:
        words.append(f"control: {content['control_kind']}")
    if content["replicate_of"]:
        words.append(f"replicate of {content['replicate_of']}")
    if content["atmosphere"]:
        words.append(f"under {content['atmosphere']}")
    if content["volume"] and content["volume"]["assumed_additive"]:
        words.append("volumes taken as additive")
    return words


def _figure(
    record: ConcentrationTable,
    table: Table,
    curve: Curve | None,
    positions: Mapping[str, int],
    units: Units,
    model_name: str,
) -> SafeString:
    unit = units.concentration_of(record.basis)
    seconds = factor("s", units.time)
    with_uncertainty = table.names("standard uncertainty")
    series = []
    for column in table.columns:
        if column.quantity != "concentration":
            continue
        scale = factor(column.unit or "1", unit)
        model = curve.columns.get(column.name) if curve is not None else None
        has_u = column.name in with_uncertainty
        series.append(
            Series(
                name=column.name,
                position=positions[column.name],
                times=table.times * seconds,
                values=table.column(column.name, "concentration") * scale,
                uncertainties=table.column(column.name, "standard uncertainty") * scale if has_u else None,
                model_times=None if curve is None else curve.times * seconds,
                model=None if model is None else model * scale,
            )
        )
    title = f"Run {record.run.code}, table {record.number}: concentrations over time"
    return draw(Plot(f"plot-{record.pk}", title, series, units.time, unit, model_name))
