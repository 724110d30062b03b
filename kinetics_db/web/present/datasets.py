"""A dataset's runs and tables in words: which revision and table, what of it counts, whether it is still the newest."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from kinetics_db.engine.shown_numbers import plain
from kinetics_db.web.present.units import factor, units_for

if TYPE_CHECKING:
    from kinetics_db.datasets.models import DatasetItem

MOST_LEFT_OUT = 10


@dataclass(frozen=True)
class ItemSheet:
    """One table of a dataset."""

    item: DatasetItem
    columns: str
    window: str
    left_out: Sequence[tuple[str, str]]
    further_left_out: int
    revised: bool
    superseded: bool


def item_sheets(items: Sequence[DatasetItem], contents: Sequence[Mapping[str, Any]]) -> list[ItemSheet]:
    """Items of `datasets.selectors.item_lines`, with their entries in the dataset's content."""
    return [_sheet(item, entry["window"]) for item, entry in zip(items, contents, strict=True)]


def _sheet(item: DatasetItem, window: Mapping[str, Any]) -> ItemSheet:
    chosen = window["columns"]
    names = [column.name for column in item.table.columns.all() if chosen is None or column.name in chosen]
    left_out = sorted(window["left_out"].items())
    return ItemSheet(
        item=item,
        columns=", ".join(names),
        window=_window(window, item.table.last_time),
        left_out=left_out[:MOST_LEFT_OUT],
        further_left_out=max(0, len(left_out) - MOST_LEFT_OUT),
        revised=item.run_revision.run.latest_number > item.run_revision.number,
        superseded=hasattr(item.table, "superseded_by"),
    )


def _window(window: Mapping[str, Any], last_time: float | None) -> str:
    start, end = window["start"], window["end"]
    if start is None and end is None:
        return "all times"
    unit = units_for(concentrations=(), durations=[last_time or 0.0]).time
    first, last = (None if t is None else plain(t * factor("s", unit), unit) for t in (start, end))
    if last is None:
        return f"from {first}"
    return f"up to {last}" if first is None else f"{first} to {last}"
