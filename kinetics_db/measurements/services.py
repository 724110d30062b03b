"""Taking in instrument files and reducing signals to concentrations."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from django.db.models import Max

from kinetics_db.accounts.models import User
from kinetics_db.engine import calibration, reading
from kinetics_db.engine.canonical import digest, sha256_hex
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.engine.tables import Table
from kinetics_db.errors import Conflict, InvalidInput
from kinetics_db.measurements.models import (
    ConcentrationTable,
    InstrumentFile,
    Reduction,
    SignalTable,
    TableColumn,
    TableSupersession,
)
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import keep_bytes, recording, require_size, save_record
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import latest_revision


def preview_file(
    *,
    user: User,
    run: Run,
    data: bytes,
    reader: str = "delimited text",
    options: Mapping[str, Any] | None = None,
) -> reading.ReadResult:
    """What would be understood of a file; stores nothing. InvalidInput says what is wrong on which line."""
    require_contributor(user=user, project_id=run.project_id)
    return _read(data, reader, options)


def store_file(
    *,
    user: User,
    run: Run,
    name: str,
    data: bytes,
    reader: str = "delimited text",
    options: Mapping[str, Any] | None = None,
) -> SignalTable:
    """Keep an instrument's bytes and the signal table read from them.

    The file is read before anything is stored, so a file that cannot be read leaves nothing behind. The same
    bytes under the same name read in the same way give the existing table.
    """
    require_contributor(user=user, project_id=run.project_id)
    name = plain_text(name, field="name", what="a file", longest=255, required=True)
    if "/" in name or "\\" in name:
        raise InvalidInput(f"'{name}' is a path", field="name", cure="a name without / or \\")
    result = _read(data, reader, options)
    with recording(user=user):
        lock_project(run.project_id)
        stored = keep_bytes(data)
        file = InstrumentFile.objects.filter(run=run, stored=stored, name=name).first()
        if file is None:
            file = save_record(
                InstrumentFile(project_id=run.project_id, run=run, stored=stored, name=name),
                user=user,
                content={
                    "format": "ratewright/instrument-file/1",
                    "run": run.code,
                    "name": name,
                    "sha256": stored.sha256,
                },
                parents=[run],
                project_id=run.project_id,
                label=f"{run.code}: {name}",
                verb="uploaded",
            )
        blob = result.table.to_bytes()
        content = {
            "format": "ratewright/signal-table/1",
            "file": file.digest,
            "reader": reader,
            "options": reading.ReadingOptions.from_plain(options or {}).to_plain(),
            "notes": list(result.notes),
            "table": sha256_hex(blob),
        }
        existing = file.signal_tables.filter(digest=digest(content)).first()
        if existing is not None:
            return existing
        return save_record(
            SignalTable(
                file=file,
                number=file.signal_tables.count() + 1,
                reader=reader,
                reader_options=content["options"],
                notes=content["notes"],
                blob=blob,
                **_extent(result.table),
            ),
            user=user,
            content=content,
            parents=[file],
            project_id=run.project_id,
            label=f"{run.code}: {name}",
            verb="read",
        )


def preview_reduction(
    *, user: User, signal_table: SignalTable, recipe: Mapping[str, Any]
) -> calibration.ConcentrationTableResult:
    """The concentrations that a recipe gives for a signal table; stores nothing."""
    require_contributor(user=user, project_id=signal_table.file.project_id)
    return calibration.reduce(signal_table.table, calibration.recipe_from_plain(recipe))


def reduce_signals(
    *, user: User, signal_table: SignalTable, name: str, recipe: Mapping[str, Any]
) -> ConcentrationTable:
    """Turn a signal table into a concentration table by a recipe (see `engine.calibration.RECIPES`).

    The recipe is kept as a version of ``name``; the same recipe again is the same version.
    """
    run = signal_table.file.run
    require_contributor(user=user, project_id=run.project_id)
    name = plain_text(name, field="name", what="a reduction", longest=120, required=True)
    checked = calibration.recipe_from_plain(recipe)
    reduced = calibration.reduce(signal_table.table, checked)
    with recording(user=user):
        lock_project(run.project_id)
        reduction = _reduction(user, run.project_id, name, checked)
        existing = ConcentrationTable.objects.filter(signal_table=signal_table, reduction=reduction).first()
        if existing is not None:
            return existing
        revision = latest_revision(run)
        number = (run.concentration_tables.aggregate(n=Max("number"))["n"] or 0) + 1
        blob = reduced.table.to_bytes()
        content = {
            "format": "ratewright/concentration-table/1",
            "run": revision.digest,
            "signal_table": signal_table.digest,
            "reduction": reduction.digest,
            "basis": reduced.basis,
            "scale_errors": [
                {"owner": e.owner, "relative_u": e.relative_u, "columns": list(e.columns)}
                for e in reduced.scale_errors
            ],
            "notes": list(reduced.notes),
            "table": sha256_hex(blob),
        }
        table = save_record(
            ConcentrationTable(
                run=run,
                signal_table=signal_table,
                reduction=reduction,
                number=number,
                basis=reduced.basis,
                scale_errors=content["scale_errors"],
                notes=content["notes"],
                blob=blob,
                **_extent(reduced.table),
            ),
            user=user,
            content=content,
            parents=[signal_table, reduction, revision],
            project_id=run.project_id,
            label=f"{run.code} t{number}",
            verb="reduced",
        )
        TableColumn.objects.bulk_create(
            TableColumn(
                table=table,
                name=column.name,
                unit=column.unit,
                values=int(np.isfinite(reduced.table.column(column.name, "concentration")).sum()),
            )
            for column in reduced.table.columns
            if column.quantity == "concentration"
        )
    return table


def supersede_table(
    *, user: User, older: ConcentrationTable, newer: ConcentrationTable, reason: str
) -> TableSupersession:
    """Declare that a newer table of the same run replaces an older one; fits on the older one become stale."""
    require_contributor(user=user, project_id=older.run.project_id)
    if older.run_id != newer.run_id:
        raise InvalidInput("the tables are of different runs", field="newer", cure="two tables of one run")
    if newer.number <= older.number:
        raise InvalidInput("the newer table is not newer", field="newer", cure="a table made later")
    reason = plain_text(reason, field="reason")
    if not reason:
        raise InvalidInput("no reason is given", field="reason", cure="say why the older table is replaced")
    with recording(user=user):
        lock_project(older.run.project_id)
        if TableSupersession.objects.filter(older=older).exists():
            raise Conflict(f"table {older.number} of run {older.run.code} has been superseded already")
        return save_record(
            TableSupersession(older=older, newer=newer, reason=reason),
            user=user,
            content={
                "format": "ratewright/supersession/1",
                "older": older.digest,
                "newer": newer.digest,
                "reason": reason,
            },
            parents=[older, newer],
            project_id=older.run.project_id,
            label=f"{older.run.code} t{older.number} by t{newer.number}",
            verb="superseded",
            reason=reason,
        )


def _read(data: bytes, reader: str, options: Mapping[str, Any] | None) -> reading.ReadResult:
    require_size(data)  # before anything is parsed
    return reading.read(data, reader=reader, options=reading.ReadingOptions.from_plain(options or {}))


def _extent(table: Table) -> dict[str, Any]:
    times = table.times
    return {
        "rows": table.rows,
        "first_time": float(times[0]) if times.size else None,
        "last_time": float(times[-1]) if times.size else None,
    }


def _reduction(user: User, project_id: int, name: str, recipe: Any) -> Reduction:
    content = recipe.to_plain()
    same = Reduction.objects.filter(project_id=project_id, name=name, digest=digest(content)).first()
    if same is not None:
        return same
    latest = Reduction.objects.filter(project_id=project_id, name=name).order_by("-number").first()
    number = (latest.number if latest else 0) + 1
    return save_record(
        Reduction(project_id=project_id, name=name, number=number, method=content["kind"]),
        user=user,
        content=content,
        parents=[latest] if latest else [],
        project_id=project_id,
        label=f"{name} v{number}",
        digest_before=latest.digest if latest else "",
    )
