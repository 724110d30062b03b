"""A dataset as somebody with psycopg and half an hour would fetch it: one query, arrays, a Parquet file."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
from django.db import connection

from kinetics_db.engine.tables import Table
from kinetics_db.exchange.parquet import parquet_bytes
from kinetics_db.exchange.tidy import TidyColumn

QUERY = """
    SELECT r.code, v.number, t.number, t.blob, d.name, d.number, d.basis, d.digest
    FROM datasets_datasetitem i
    JOIN datasets_dataset d ON d.id = i.dataset_id
    JOIN runs_runrevision v ON v.id = i.run_revision_id
    JOIN runs_run r ON r.id = v.run_id
    JOIN measurements_concentrationtable t ON t.id = i.table_id
    WHERE i.dataset_id = %s ORDER BY i."order"
"""


def parquet_by_hand(dataset_id: int) -> bytes:
    """The same bytes as REST answers, for a dataset whose windows leave everything in."""
    connection.ensure_connection()
    with connection.connection.cursor() as cursor:  # psycopg's own
        cursor.execute(QUERY, [dataset_id])
        rows = cursor.fetchall()
    found: dict[str, list[Any]] = {name: [] for name in ("run", "revision", "table", "column", "unit")}
    times, values, sigmas = [], [], []
    for code, revision, number, blob, *_ in rows:
        table = Table.from_bytes(bytes(blob))
        for column in table.names("concentration"):
            times.append(table.times)
            values.append(table.column(column, "concentration"))
            sigmas.append(table.column(column, "standard uncertainty"))
            unit = table.columns[table.index(column, "concentration")].unit
            for name, value in zip(found, (code, revision, number, column, unit), strict=True):
                found[name] += [value] * table.times.size
    columns = [
        TidyColumn("run", found["run"]),
        TidyColumn("run_revision", found["revision"]),
        TidyColumn("table", found["table"]),
        TidyColumn("time_s", np.concatenate(times)),
        TidyColumn("column", found["column"]),
        TidyColumn("value", np.concatenate(values)),
        TidyColumn("standard_uncertainty", np.concatenate(sigmas)),
        TidyColumn("unit", found["unit"]),
        TidyColumn("left_out", [""] * len(found["run"])),
    ]
    about = dict(zip(("name", "number", "basis", "digest"), rows[0][4:], strict=True))
    return parquet_bytes(columns, {"dataset": dataset_id, **json.loads(json.dumps(about))})
