"""Runs as rows of a list: conditions, what was measured, the newest table for a small curve."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from django.db.models import Count, Exists, OuterRef, Subquery
from django.db.models.functions import Coalesce

from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import StartConcentration, newest_revisions, start_concentrations

if TYPE_CHECKING:
    from django.db.models import QuerySet


@dataclass(frozen=True)
class RunRow:
    """A run in a list.

    Attributes
    ----------
    run : with its project, author and the run that it repeats
    temperature, temperature_u : K, with its standard uncertainty; None where it was not stated
    starts : start concentrations in order of addition, mol/L or percent as ``basis`` says
    files, tables : how many there are, superseded tables too
    table : the newest table that no other one supersedes, with its numbers; None where there is none
    """

    run: Run
    temperature: float | None
    temperature_u: float | None
    starts: tuple[StartConcentration, ...]
    basis: str
    files: int
    tables: int
    table: ConcentrationTable | None

    @property
    def waits(self) -> bool:
        """Whether it waits for its file or the reduction of it."""
        return not self.tables


def run_rows(runs: Iterable[Run]) -> list[RunRow]:
    """Rows of runs that somebody may see, in their order, in two queries.

    The runs come from `runs.query.runs_found`, which has checked that, with what ``RunRow.run`` names.
    """
    runs = list(runs)
    ids = [run.pk for run in runs]
    revisions = newest_revisions(ids).annotate(
        files=_count(InstrumentFile.objects.filter(run=OuterRef("run"))),
        tables=_count(ConcentrationTable.objects.filter(run=OuterRef("run"))),
    )
    by_run = {revision.run_id: revision for revision in revisions}
    tables = newest_tables(ids)
    rows = []
    for run in runs:
        revision = by_run[run.pk]
        content = revision.content
        temperature = content["temperature"] or {}
        rows.append(
            RunRow(
                run=run,
                temperature=temperature.get("value"),
                temperature_u=temperature.get("u"),
                starts=start_concentrations(content),
                basis=content["basis"],
                files=revision.files,
                tables=revision.tables,
                table=tables.get(run.pk),
            )
        )
    return rows


def newest_tables(run_ids: Sequence[int]) -> dict[int, ConcentrationTable]:
    """The newest table of each run that no other one supersedes, with its numbers, by run id, in one query."""
    current = ConcentrationTable.objects.filter(superseded_by__isnull=True)
    newer = current.filter(run=OuterRef("run"), number__gt=OuterRef("number"))
    found = current.filter(~Exists(newer), run_id__in=run_ids).defer("canonical")
    return {table.run_id: table for table in found}


def _count(rows: QuerySet) -> Coalesce:
    return Coalesce(Subquery(rows.order_by().values("run").annotate(n=Count("pk")).values("n")), 0)
