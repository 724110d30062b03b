"""Runs that were logged before they could be searched by control and replicate."""

from __future__ import annotations

import json

import pytest
from django.db import connection
from django.db.migrations.executor import MigrationExecutor
from django.utils import timezone

from kinetics_db.runs.models import Run, RunCondition
from tests.factories.people import make_project

BEFORE = [("runs", "0001_initial")]


def content(**more: object) -> bytes:
    return json.dumps({"control_kind": "", "replicate_of": "", "basis": "mol/L", **more}).encode()


@pytest.mark.django_db(transaction=True)
def test_older_runs_can_be_searched_by_control_replicate_and_percent() -> None:
    project = make_project()
    executor = MigrationExecutor(connection)
    executor.migrate(BEFORE)
    try:
        old = executor.loader.project_state(BEFORE).apps
        runs = {
            code: old.get_model("runs", "Run").objects.create(
                project_id=project.pk, code=code, created_by_id=project.created_by_id, latest_number=2
            )
            for code in ("K01", "K02", "P03")
        }
        for code, number, canonical in (
            ("K01", 1, content(control_kind="blank")),
            ("K01", 2, content()),
            ("K02", 2, content(control_kind="without light", replicate_of="K01")),
            ("P03", 2, content(basis="relative")),
        ):
            old.get_model("runs", "RunRevision").objects.create(
                run=runs[code],
                number=number,
                canonical=canonical,
                digest="0" * 64,
                created=timezone.now(),
                created_by_id=project.created_by_id,
            )
        for code, key in (("K01", "c0:A"), ("P03", "c0:A"), ("P03", "temperature")):
            old.get_model("runs", "RunCondition").objects.create(run=runs[code], key=key, value=1.0)
    finally:
        executor = MigrationExecutor(connection)
        executor.migrate(executor.loader.graph.leaf_nodes())
    found = {run.code: run for run in Run.objects.select_related("replicate_of")}
    assert {code: run.control_kind for code, run in found.items()} == {
        "K01": "",
        "K02": "without light",
        "P03": "",
    }
    assert (found["K02"].replicate_of, found["K01"].replicate_of) == (found["K01"], None)
    keys = sorted(RunCondition.objects.values_list("run__code", "key"))
    assert keys == [("K01", "c0:A"), ("P03", "percent:A"), ("P03", "temperature")]
