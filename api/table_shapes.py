"""Files, signal tables and concentration tables as plain values, and what the description says of them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

from rest_framework import serializers

from api.errors import plain_problem
from api.schema import ProblemPlace
from kinetics_db.exchange.tables import plain_values

if TYPE_CHECKING:
    from kinetics_db.engine.calibration import ConcentrationTableResult
    from kinetics_db.engine.reading import ReadResult
    from kinetics_db.engine.tables import Table
    from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile, SignalTable

FIRST_ROWS = 10


class ShownColumn(serializers.Serializer):
    """A column without its numbers."""

    name = serializers.CharField()
    unit = serializers.CharField(help_text="'' for a pure number")
    quantity = serializers.ChoiceField(["time", "signal", "concentration", "standard uncertainty"])


class Extent(serializers.Serializer):
    """How much a table holds; times in s."""

    rows = serializers.IntegerField()
    first_time = serializers.FloatField(allow_null=True)
    last_time = serializers.FloatField(allow_null=True)


class NumbersPreview(Extent):
    """A table that is not stored, with its first rows in the order of the columns."""

    columns = ShownColumn(many=True)
    first_rows = serializers.ListField(
        child=serializers.ListField(child=serializers.FloatField(allow_null=True))
    )
    notes = serializers.ListField(child=serializers.CharField(), help_text="every interpretation made")
    warnings = ProblemPlace(many=True)


class Said(serializers.Serializer):
    """Something that the file says of itself."""

    name = serializers.CharField()
    value = serializers.CharField()


class FileRead(NumbersPreview):
    """What was understood of a file; ``file`` and ``signal_table`` are null unless it is stored."""

    reader = serializers.CharField()
    options = serializers.DictField(help_text="as stated")
    metadata = Said(many=True)
    file = serializers.IntegerField(allow_null=True)
    signal_table = serializers.IntegerField(allow_null=True)


class NewFile(serializers.Serializer):
    """A form with an instrument's file."""

    file = serializers.FileField()
    name = serializers.CharField(required=False, help_text="instead of the file's own")
    reader = serializers.CharField(required=False, help_text="'delimited text' unless stated")
    options = serializers.CharField(required=False, help_text="options of the reader: an object in JSON")


class SignalTableOfFile(serializers.Serializer):
    """A way in which a file was read."""

    id = serializers.IntegerField()
    number = serializers.IntegerField()
    reader = serializers.CharField()
    options = serializers.DictField()
    rows = serializers.IntegerField()


class ShownFile(serializers.Serializer):
    """An instrument's file as it came."""

    id = serializers.IntegerField()
    run = serializers.IntegerField()
    name = serializers.CharField()
    size = serializers.IntegerField(help_text="bytes")
    sha256 = serializers.CharField()
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    signal_tables = SignalTableOfFile(many=True)


class ShownSignals(Extent):
    """A signal table without its numbers."""

    id = serializers.IntegerField()
    run = serializers.IntegerField()
    file = serializers.IntegerField()
    file_name = serializers.CharField()
    number = serializers.IntegerField()
    reader = serializers.CharField()
    options = serializers.DictField()
    columns = ShownColumn(many=True)
    notes = serializers.ListField(child=serializers.CharField())
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()


class TableColumnSchema(serializers.Serializer):
    """A column of concentrations, each value with its standard uncertainty."""

    name = serializers.CharField()
    unit = serializers.CharField()
    values = serializers.IntegerField(help_text="how many are not missing")


class ReductionName(serializers.Serializer):
    """A version of a recipe, by name."""

    name = serializers.CharField()
    number = serializers.IntegerField()
    kind = serializers.CharField()


class ScaleErrorSchema(serializers.Serializer):
    """One unknown factor on whole columns, which is not in their standard uncertainties."""

    owner = serializers.CharField()
    relative_u = serializers.FloatField()
    columns = serializers.ListField(child=serializers.CharField())


class SupersededBy(serializers.Serializer):
    """The table that replaces one."""

    table = serializers.IntegerField()
    reason = serializers.CharField()


class ShownTable(Extent):
    """A concentration table without its numbers."""

    id = serializers.IntegerField()
    run = serializers.IntegerField()
    number = serializers.IntegerField()
    basis = serializers.ChoiceField(["mol/L", "relative"])
    columns = TableColumnSchema(many=True)
    signal_table = serializers.IntegerField()
    reduction = ReductionName()
    scale_errors = ScaleErrorSchema(many=True)
    notes = serializers.ListField(child=serializers.CharField())
    superseded_by = SupersededBy(allow_null=True)
    digest = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()


class TableDetail(ShownTable):
    """A concentration table with the recipe that made it."""

    recipe = serializers.DictField()


class NewTable(serializers.Serializer):
    """A reduction of signals to concentrations."""

    signal_table = serializers.IntegerField()
    name = serializers.CharField(help_text="of the reduction; may be absent in a preview")
    recipe = serializers.DictField(help_text="with its 'kind': 'internal standard' or 'as reported'")


class ReducedPreview(NumbersPreview):
    """Concentrations that are not stored."""

    basis = serializers.ChoiceField(["mol/L", "relative"])
    scale_errors = ScaleErrorSchema(many=True)


class NewSupersession(serializers.Serializer):
    """Which newer table of the same run replaces this one, and why."""

    newer = serializers.IntegerField()
    reason = serializers.CharField()


def plain_read(result: ReadResult, *, reader: str, options: Mapping[str, Any]) -> dict[str, Any]:
    """What was understood of a file."""
    return {
        "reader": reader,
        "options": dict(options),
        **_preview(result.table),
        "notes": list(result.notes),
        "warnings": [plain_problem(problem) for problem in result.warnings],
        "metadata": [{"name": name, "value": value} for name, value in result.metadata],
        "file": None,
        "signal_table": None,
    }


def plain_reduced(result: ConcentrationTableResult) -> dict[str, Any]:
    """What a recipe gives."""
    return {
        **_preview(result.table),
        "basis": result.basis,
        "notes": list(result.notes),
        "warnings": [plain_problem(problem) for problem in result.warnings],
        "scale_errors": [
            {"owner": e.owner, "relative_u": e.relative_u, "columns": list(e.columns)}
            for e in result.scale_errors
        ],
    }


def _preview(table: Table) -> dict[str, Any]:
    times = table.times
    return {
        "columns": _columns(table),
        "rows": table.rows,
        "first_time": float(times[0]) if times.size else None,
        "last_time": float(times[-1]) if times.size else None,
        "first_rows": [plain_values(row) for row in table.values[:FIRST_ROWS]],
    }


def _columns(table: Table) -> list[dict[str, str]]:
    return [{"name": c.name, "unit": c.unit, "quantity": c.quantity} for c in table.columns]


def plain_files(files: Iterable[InstrumentFile]) -> list[dict[str, Any]]:
    """Files with the tables read from them."""
    return [
        {
            "id": file.pk,
            "run": file.run_id,
            "name": file.name,
            "size": file.stored.size,
            "sha256": file.stored.sha256,
            **_made(file),
            "signal_tables": [
                {
                    "id": table.pk,
                    "number": table.number,
                    "reader": table.reader,
                    "options": table.reader_options,
                    "rows": table.rows,
                }
                for table in file.signal_tables.all()
            ],
        }
        for file in files
    ]


def plain_signals(table: SignalTable) -> dict[str, Any]:
    """A signal table without its numbers."""
    return {
        "id": table.pk,
        "run": table.file.run_id,
        "file": table.file_id,
        "file_name": table.file.name,
        "number": table.number,
        "reader": table.reader,
        "options": table.reader_options,
        "columns": _columns(table.table),
        **_extent(table),
        "notes": table.notes,
        **_made(table),
    }


def plain_table(table: ConcentrationTable) -> dict[str, Any]:
    """A concentration table without its numbers and recipe."""
    newer = getattr(table, "superseded_by", None)
    reduction = table.reduction
    return {
        "id": table.pk,
        "run": table.run_id,
        "number": table.number,
        "basis": table.basis,
        "columns": [{"name": c.name, "unit": c.unit, "values": c.values} for c in _in_order(table)],
        **_extent(table),
        "signal_table": table.signal_table_id,
        "reduction": {"name": reduction.name, "number": reduction.number, "kind": reduction.method},
        "scale_errors": table.scale_errors,
        "notes": table.notes,
        "superseded_by": {"table": newer.newer_id, "reason": newer.reason} if newer is not None else None,
        **_made(table),
    }


def plain_table_detail(table: ConcentrationTable) -> dict[str, Any]:
    """A concentration table with its recipe, without its numbers."""
    return {**plain_table(table), "recipe": table.reduction.content}


def _in_order(table: ConcentrationTable) -> list[Any]:
    return sorted(table.columns.all(), key=lambda column: column.pk)


def _extent(table: Any) -> dict[str, Any]:
    return {"rows": table.rows, "first_time": table.first_time, "last_time": table.last_time}


def _made(record: Any) -> dict[str, Any]:
    return {
        "digest": record.digest,
        "created": record.created,
        "created_by": record.created_by.get_username(),
    }
