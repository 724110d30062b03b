"""Reads about files and tables."""

from __future__ import annotations

from collections.abc import Sequence

from django.db.models import Exists, OuterRef, Prefetch, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile, Reduction, SignalTable
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader
from kinetics_db.provenance.selectors import read_bytes
from kinetics_db.runs.models import Run


def tables_by_id(*, user: User, table_ids: Sequence[int]) -> dict[int, ConcentrationTable]:
    """Those of the concentration tables that the person may see, by id, in one query."""
    found = ConcentrationTable.objects.filter(
        pk__in=table_ids, run__project__in=projects_visible_to(user)
    ).select_related("run", "reduction", "signal_table__file")
    return {table.pk: table for table in found}


def current_tables_in(*, user: User, project_id: int) -> QuerySet[ConcentrationTable]:
    """Concentration tables of a project that no newer table supersedes, by run."""
    require_reader(user=user, project_id=project_id)
    return (
        ConcentrationTable.objects.filter(run__project_id=project_id, superseded_by__isnull=True)
        .select_related("run", "reduction", "signal_table__file")
        .order_by("run__code", "number")
    )


def table_by_id(*, user: User, table_id: int) -> ConcentrationTable:
    """One concentration table that the person may see, with all that it was made from."""
    found = (
        ConcentrationTable.objects.filter(pk=table_id)
        .select_related(
            "run__project",
            "reduction",
            "signal_table__file__stored",
            "created_by",
            "superseded_by__newer__run",
        )
        .defer("signal_table__blob", "superseded_by__newer__blob")
        .first()
    )
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.run.project_id)
    return found


def tables_of_run(*, user: User, run: Run, numbers: bool = False) -> QuerySet[ConcentrationTable]:
    """Concentration tables of a run, newest first, each with what supersedes it.

    Their numbers (``blob``) are loaded at once only where asked for.
    """
    require_reader(user=user, project_id=run.project_id)
    found = ConcentrationTable.objects.filter(run=run).select_related(
        "run", "reduction", "signal_table__file", "created_by", "superseded_by__newer__run"
    )
    return found.defer(*HEAVY_OF_TABLES, *(() if numbers else ("blob",))).order_by("-number")


HEAVY_OF_TABLES = (
    "canonical",
    "reduction__canonical",
    "signal_table__canonical",
    "signal_table__blob",
    "signal_table__file__canonical",
    "superseded_by__canonical",
    "superseded_by__newer__canonical",
    "superseded_by__newer__blob",
)


def files_of_run(*, user: User, run: Run) -> QuerySet[InstrumentFile]:
    """Instrument files of a run, newest first, each with its signal tables (``signal_tables.all()``)."""
    require_reader(user=user, project_id=run.project_id)
    signals = SignalTable.objects.defer("canonical", "blob").order_by("number")
    return (
        InstrumentFile.objects.filter(run=run)
        .select_related("stored", "created_by")
        .defer("canonical")
        .prefetch_related(Prefetch("signal_tables", queryset=signals))
        .order_by("-created", "-id")
    )


def signal_tables_of_run(*, user: User, run: Run) -> QuerySet[SignalTable]:
    """Signal tables read from a run's files, newest first, without their numbers."""
    require_reader(user=user, project_id=run.project_id)
    return (
        SignalTable.objects.filter(file__run=run)
        .select_related("file", "created_by")
        .defer("canonical", "blob", "file__canonical")
        .order_by("-created", "-id")
    )


def reductions_in(*, user: User, project_id: int) -> QuerySet[Reduction]:
    """The newest version of each reduction of a project, by name, to be used again."""
    require_reader(user=user, project_id=project_id)
    newer = Reduction.objects.filter(
        project_id=project_id, name=OuterRef("name"), number__gt=OuterRef("number")
    )
    found = Reduction.objects.filter(~Exists(newer), project_id=project_id)
    return found.select_related("created_by").order_by("name", "id")


def signal_table_by_id(*, user: User, signal_table_id: int) -> SignalTable:
    """One signal table that the person may see."""
    found = SignalTable.objects.select_related("file__run__project").filter(pk=signal_table_id).first()
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.file.project_id)
    return found


def file_by_id(*, user: User, file_id: int) -> InstrumentFile:
    """One instrument file that the person may see."""
    found = InstrumentFile.objects.select_related("stored", "run").filter(pk=file_id).first()
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.project_id)
    return found


def bytes_of(file: InstrumentFile) -> bytes:
    """The instrument's bytes as they came, checked against their hash."""
    return read_bytes(file.stored)
