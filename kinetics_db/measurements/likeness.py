"""What was stated for earlier files and tables of a project, offered again for those that look alike."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import PurePath
from typing import Any

from django.db.models import OuterRef, QuerySet, Subquery

from kinetics_db.accounts.models import User
from kinetics_db.engine import reading
from kinetics_db.errors import InvalidInput
from kinetics_db.measurements.models import ConcentrationTable, Reduction, SignalTable, TableColumn
from kinetics_db.projects.selectors import require_reader

LOOKED_AT = 60
"""Newest records among which is looked for what is alike."""
OFFERED = 8
TRIED = 4
QUICK_TO_READ = 20_000_000
"""Larger files are tried with one earlier reading only."""


def readings_like(*, user: User, project_id: int, name: str) -> list[SignalTable]:
    """Earlier signal tables whose reading was helped by options, different ones once: alike names first, then
    the newest."""
    require_reader(user=user, project_id=project_id)
    newest = (
        SignalTable.objects.filter(file__project_id=project_id)
        .exclude(reader_options={})
        .select_related("file__run")
        .order_by("-pk")
    )
    different: dict[str, SignalTable] = {}
    for table in newest.defer("blob", "canonical", "file__canonical")[:LOOKED_AT]:
        different.setdefault(repr(sorted(table.reader_options.items())), table)
    return sorted(different.values(), key=lambda table: _distance(table.file.name, name))[:OFFERED]


def reading_that_fits(candidates: Sequence[SignalTable], *, name: str, data: bytes) -> SignalTable | None:
    """The first of the earlier readings that makes these bytes readable as much the same columns."""
    for candidate in candidates[: TRIED if len(data) <= QUICK_TO_READ else 1]:
        if "columns" in candidate.reader_options and _distance(candidate.file.name, name):
            continue  # stated names fit any file with as many columns; only the file's own name tells
        try:
            options = reading.ReadingOptions.from_plain(candidate.reader_options)
            found = reading.read(data, reader=candidate.reader, options=options)
        except InvalidInput:
            continue
        before, now = set(candidate.table.names("signal")), set(found.table.names("signal"))
        if 2 * len(before & now) >= len(before | now):
            return candidate
    return None


def reductions_like(*, user: User, project_id: int, signals: Sequence[str]) -> Sequence[Reduction]:
    """Recipes of the project whose signals a table all has, the newest first.

    Each carries ``last_run``, the code of the run that it was last used for.
    """
    require_reader(user=user, project_id=project_id)
    last_run = ConcentrationTable.objects.filter(reduction=OuterRef("pk")).order_by("-pk").values("run__code")
    newest = (
        Reduction.objects.filter(project_id=project_id)
        .annotate(last_run=Subquery(last_run[:1]))
        .order_by("-pk")[:LOOKED_AT]
    )
    known = set(signals)
    return [found for found in newest if _signals_of(found.content) <= known][:OFFERED]


def species_in(*, user: User, project_id: int) -> QuerySet[TableColumn, str]:
    """Names of columns that tables of the project have had, by name."""
    require_reader(user=user, project_id=project_id)
    names = TableColumn.objects.filter(table__run__project_id=project_id).order_by("name")
    return names.values_list("name", flat=True).distinct()


def _signals_of(recipe: dict[str, Any]) -> set[str]:
    parts = [*recipe.get("signals", ()), *recipe.get("columns", ())]
    if "standard" in recipe:
        parts.append(recipe["standard"])
    uncertainties = {part.get("uncertainty_signal") for part in parts} - {None}
    return {part["signal"] for part in parts} | uncertainties


def _distance(name: str, other: str) -> int:
    """0 when two file names differ in numbers only, 1 when they have the same ending, else 2."""
    if _pattern(name) == _pattern(other):
        return 0
    return 1 if PurePath(name).suffix.lower() == PurePath(other).suffix.lower() else 2


def _pattern(name: str) -> str:
    return re.sub(r"\d+", "#", name.lower())
