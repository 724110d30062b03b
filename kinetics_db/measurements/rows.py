"""Runs as rows of a list: conditions, what was measured, the newest table for a small curve."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from django.db.models import Count, OuterRef, Subquery
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


def run_rows(runs: Iterable[Run], *, numbers: bool = True) -> list[RunRow]:
    """Rows of runs that somebody may see, in their order, in one query.

    The runs come from `runs.query.runs_found`, which has checked that, with what ``RunRow.run`` names. Without
    ``numbers`` no table is read.
    """
    runs = list(runs)
    revisions = newest_revisions([run.pk for run in runs]).annotate(
        files=_count(InstrumentFile.objects.filter(run=OuterRef("run"))),
        tables=_count(ConcentrationTable.objects.filter(run=OuterRef("run"))),
        **(_of_newest_table() if numbers else {}),
    )
    by_run = {revision.run_id: revision for revision in revisions.defer("digest", "created", "reason")}
    return [_row(run, by_run[run.pk]) for run in runs]


def _row(run: Run, revision: Any) -> RunRow:
    content = revision.content
    temperature = content["temperature"] or {}
    return RunRow(
        run=run,
        temperature=temperature.get("value"),
        temperature_u=temperature.get("u"),
        starts=start_concentrations(content),
        basis=content["basis"],
        files=revision.files,
        tables=revision.tables,
        table=_table(revision),
    )


SHOWN_OF_TABLE = ("id", "blob", "rows", "last_time", "number")
"""In the order of the model, as `from_db` takes them; other fields are fetched when somebody asks for them."""


def _of_newest_table() -> dict[str, Subquery]:
    """The newest table of a revision's run that no other one supersedes, field by field."""
    current = ConcentrationTable.objects.filter(run=OuterRef("run"), superseded_by__isnull=True)
    newest = current.order_by("-number")
    return {f"table_{name}": Subquery(newest.values(name)[:1]) for name in SHOWN_OF_TABLE}


def _table(revision: Any) -> ConcentrationTable | None:
    if getattr(revision, "table_id", None) is None:
        return None
    values = [getattr(revision, f"table_{name}") for name in SHOWN_OF_TABLE]
    return ConcentrationTable.from_db(revision._state.db, SHOWN_OF_TABLE, values)


def _count(rows: QuerySet) -> Coalesce:
    return Coalesce(Subquery(rows.order_by().values("run").annotate(n=Count("pk")).values("n")), 0)
