"""Reads about files and tables."""

from __future__ import annotations

from collections.abc import Sequence

from django.db.models import QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile, SignalTable
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader
from kinetics_db.provenance.selectors import read_bytes


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
