"""Thousands of runs at once, written in bulk with the content that services write, but without audit and lineage."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np

from kinetics_db.accounts.models import User
from kinetics_db.engine.canonical import canonical_json, sha256_hex
from kinetics_db.engine.tables import Column, Table
from kinetics_db.measurements.models import (
    ConcentrationTable,
    InstrumentFile,
    Reduction,
    SignalTable,
    TableColumn,
)
from kinetics_db.provenance.models import StoredBytes
from kinetics_db.runs.entry import Amount
from kinetics_db.runs.models import Run, RunCondition, RunRevision
from kinetics_db.runs.query import condition_key
from tests.factories.flow import make_run

FIRST_DAY = datetime(2026, 1, 1, tzinfo=UTC)
EVERY = timedelta(minutes=17)
POINTS = 40
SIGMA = 1e-4
"""Standard uncertainty of each value of the tables, mol/L."""
COLUMNS = (
    Column("time", "s", "time"),
    Column("A", "mol/L", "concentration"),
    Column("A", "mol/L", "standard uncertainty"),
)


def concentration(i: int) -> float:
    """[A]0 of the i-th run, mol/L: 1 to 200 mmol/L, each as often as the others."""
    return (1 + i % 200) / 1000


def kelvin(i: int) -> float:
    """Temperature of the i-th run, K: 293.15 to 333.15 in steps of 5 K."""
    return 293.15 + 5 * (i % 9)


def make_many_runs(
    user: User, project_id: int, number: int, *, tables: int = 0, prefix: str = "M"
) -> list[Run]:
    """Runs M000000, M000001, ... as long ago as their number is small, every tenth a blank.

    The first ``tables`` of them have an instrument file and a concentration table. A pattern is logged through
    the service, so the content is what services write.
    """
    template = _template(user, project_id, prefix)
    with _made_when_they_say():
        runs = Run.objects.bulk_create(
            [
                Run(
                    project_id=project_id,
                    code=f"{prefix}{i:06d}",
                    created=FIRST_DAY + i * EVERY,
                    created_by=user,
                    latest_number=1,
                    control_kind="blank" if i % 10 == 0 else "",
                )
                for i in range(number)
            ],
            batch_size=2000,
        )
    RunRevision.objects.bulk_create(
        [_revision(run, i, template, user) for i, run in enumerate(runs)], batch_size=2000
    )
    RunCondition.objects.bulk_create(
        [
            RunCondition(run=run, key=key, value=value)
            for i, run in enumerate(runs)
            for key, value in (
                (condition_key("A"), concentration(i)),
                (condition_key("B"), 0.002),
                ("temperature", kelvin(i)),
            )
        ],
        batch_size=5000,
    )
    _make_tables(user, project_id, runs[:tables])
    return runs


CODE, CONTROL, KELVIN, CONCENTRATION = b"code of a run", b"kind of control", 345.678, 0.123456


def _template(user: User, project_id: int, prefix: str) -> bytes:
    """Canonical content with four places to be filled in."""
    logged = make_run(
        user,
        project_id,
        f"{prefix}-pattern",
        {"A": Amount(1, "mM", 0.01), "B": Amount(2, "mM")},
        temperature=Amount(300, "K", 0.1),
    )
    content = logged.revisions.get().content
    content["code"], content["control_kind"] = CODE.decode(), CONTROL.decode()
    content["temperature"]["value"] = KELVIN
    content["start"][0]["concentration"] = CONCENTRATION
    return canonical_json(content)


def _revision(run: Run, i: int, template: bytes, user: User) -> RunRevision:
    canonical = template.replace(CODE, run.code.encode()).replace(CONTROL, run.control_kind.encode())
    canonical = canonical.replace(repr(KELVIN).encode(), repr(kelvin(i)).encode())
    canonical = canonical.replace(repr(CONCENTRATION).encode(), repr(concentration(i)).encode())
    return RunRevision(run=run, number=1, created_by=user, canonical=canonical, digest=sha256_hex(canonical))


@contextmanager
def _made_when_they_say() -> Iterator[None]:
    """Keep the time of creation that a row brings with it."""
    field = Run._meta.get_field("created")
    field.auto_now_add = False
    try:
        yield
    finally:
        field.auto_now_add = True


def _make_tables(user: User, project_id: int, runs: list[Run]) -> None:
    """For each run a file, its signals and a table: [A] falls with a half-life of some minutes, with noise."""
    if not runs:
        return
    stored = StoredBytes.objects.create(sha256=sha256_hex(b"many runs"), size=9)
    same: dict[str, Any] = {"created_by": user, **_record({"format": "pattern"})}
    reduction = Reduction.objects.bulk_create(
        [Reduction(project_id=project_id, name="many", number=1, method="as reported", **same)]
    )[0]
    files = InstrumentFile.objects.bulk_create(
        InstrumentFile(project_id=project_id, run=run, stored=stored, name="many.csv", **same) for run in runs
    )
    extents = [_extent(i) for i in range(len(runs))]
    signals = SignalTable.objects.bulk_create(
        SignalTable(file=file, number=1, reader="delimited text", **extent, **same)
        for file, extent in zip(files, extents, strict=True)
    )
    tables = ConcentrationTable.objects.bulk_create(
        ConcentrationTable(
            run=run, signal_table=table, reduction=reduction, number=1, basis="mol/L", created_by=user,
            **extent, **_record(_content_of_table(extent["blob"], run)),
        )
        for run, table, extent in zip(runs, signals, extents, strict=True)
    )  # fmt: skip
    TableColumn.objects.bulk_create(
        TableColumn(table=table, name="A", unit="mol/L", values=POINTS) for table in tables
    )


def _extent(i: int) -> dict[str, Any]:
    """The numbers of the i-th table and where they begin and end."""
    times = np.linspace(0.0, 3600.0, POINTS)
    rate = 1e-3 * np.exp(6000 * (1 / 313.15 - 1 / kelvin(i)))
    noise = np.random.default_rng(i).normal(0.0, SIGMA, POINTS)
    values = np.column_stack(
        [times, concentration(i) * np.exp(-rate * times) + noise, np.full(POINTS, SIGMA)]
    )
    return {
        "blob": Table(COLUMNS, values).to_bytes(),
        "rows": POINTS,
        "first_time": 0.0,
        "last_time": 3600.0,
    }


def _content_of_table(blob: bytes, run: Run) -> dict[str, Any]:
    return {
        "format": "ratewright/concentration-table/1",
        "basis": "mol/L",
        "notes": [],
        "scale_errors": [],
        "run": run.code,
        "table": sha256_hex(blob),
    }


def _record(content: dict[str, Any]) -> dict[str, Any]:
    canonical = canonical_json(content)
    return {"digest": sha256_hex(canonical), "canonical": canonical}
