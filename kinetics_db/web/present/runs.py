"""What pages say of runs: units for their numbers, temperature, words, the place on a page."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from kinetics_db.engine.tables import Table
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.units import ZERO_CELSIUS, Units, units_for

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable
    from kinetics_db.runs.models import RunRevision


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


def words_of(content: Mapping[str, Any]) -> list[str]:
    """What marks a run out: control, replicate, atmosphere, how its volume is known."""
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
