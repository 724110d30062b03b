"""Many people at the same moment: one fit, one claim, one unbroken chain."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Any

import pytest
from django.db import connection

from kinetics_db.accounts.services import create_user
from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.errors import Conflict, InvalidInput, NotPermitted
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import request_fit
from kinetics_db.jobs import services as jobs
from kinetics_db.jobs.models import Job
from kinetics_db.materials.services import enter_compound
from kinetics_db.measurements.models import InstrumentFile
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.services import create_project, set_member
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.provenance.selectors import chain_breaks
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.services import log_run
from tests.factories.people import make_member, make_project, make_user
from tests.factories.small import make_study

pytestmark = pytest.mark.django_db(transaction=True)


def at_once(count: int, work: Callable[[int], Any]) -> list[Any]:
    """Run work(0) ... work(count - 1) in threads that start together; exceptions are raised here."""
    together = threading.Barrier(count)
    results: list[Any] = [None] * count
    errors: list[BaseException] = []

    def run(i: int) -> None:
        try:
            together.wait()
            results[i] = work(i)
        except BaseException as error:
            errors.append(error)
        finally:
            connection.close()

    threads = [threading.Thread(target=run, args=(i,)) for i in range(count)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    if errors:
        raise errors[0]
    return results


def test_twenty_equal_requests_at_once_make_one_fit() -> None:
    study = make_study()

    def ask(_: int) -> int:
        fit = request_fit(
            user=study.user,
            dataset=study.dataset,
            mechanism_version=study.version,
            constants=[Constant("k", start=0.002)],
        )
        return fit.pk

    assert len(set(at_once(20, ask))) == 1
    assert (Fit.objects.count(), Job.objects.filter(kind="fit").count()) == (1, 1)
    assert chain_breaks() == []


def test_of_twelve_workers_that_claim_a_job_at_once_one_gets_it() -> None:
    job = jobs.request_job(user=make_user(), kind="fit", subject_id=1)
    claims = [claim for claim in at_once(12, lambda _: jobs.claim_job(job.pk)) if claim is not None]
    assert [claim.token for claim in claims] == [1]


def test_sixteen_writers_at_once_keep_one_unbroken_chain() -> None:
    project = make_project()
    before = AuditEntry.objects.count()

    def write(i: int) -> None:
        for j in range(3):
            write_version(
                user=project.created_by, project_id=project.pk, name=f"idea {i}", text=f"A --k--> {j + 1} B"
            )

    at_once(16, write)
    assert MechanismVersion.objects.count() == 48
    assert AuditEntry.objects.count() - before == 48 + 16
    assert chain_breaks() == []


def test_ten_people_who_write_one_mechanism_at_once_get_ten_numbers() -> None:
    project = make_project()
    versions = at_once(
        10,
        lambda i: (
            write_version(
                user=project.created_by, project_id=project.pk, name="idea", text=f"A --k--> {i + 1} B"
            ).number
        ),
    )
    assert sorted(versions) == list(range(1, 11))


def test_the_same_file_uploaded_ten_times_at_once_is_kept_once() -> None:
    study = make_study()
    run = study.tables[0].run
    data = b"t / s,A / mM\n0,1\n1,2\n"
    tables = at_once(10, lambda _: store_file(user=study.user, run=run, name="one.csv", data=data).pk)
    assert len(set(tables)) == 1
    assert InstrumentFile.objects.filter(name="one.csv").count() == 1


def test_five_instruments_that_reduce_at_once_share_one_recipe_version() -> None:
    study = make_study(starts=(5.0, 10.0, 15.0, 20.0, 25.0))
    recipe = {"kind": "as reported", "columns": [{"signal": "A", "species": "A"}], "constant_u": 0.5}
    tables = at_once(
        5,
        lambda i: reduce_signals(
            user=study.user, signal_table=study.tables[i].signal_table, name="quick look", recipe=recipe
        ),
    )
    assert {table.reduction.number for table in tables} == {1}


def test_the_same_dataset_frozen_six_times_at_once_is_one() -> None:
    study = make_study()
    ids = [table.pk for table in study.tables]
    made = at_once(
        6,
        lambda _: freeze_dataset(user=study.user, project_id=study.project.pk, name="new", table_ids=ids).pk,
    )
    assert len(set(made)) == 1


def test_of_six_people_who_log_one_code_at_once_one_succeeds_and_five_are_told() -> None:
    project = make_project()
    enter_compound(user=project.created_by, project_id=project.pk, name="A")
    entry = RunEntry("R-1", [ChargeEntry(Amount(1.0, "mM"), compound="A")])

    def log(_: int) -> str:
        try:
            log_run(user=project.created_by, project_id=project.pk, entry=entry)
        except InvalidInput as error:
            return str(error)
        return "logged"

    said = at_once(6, log)
    assert said.count("logged") == 1
    assert all("already" in answer for answer in said if answer != "logged")


def test_two_owners_who_demote_each_other_at_once_leave_one_owner_and_no_deadlock() -> None:
    for _ in range(4):
        project = make_project()
        owners = [project.created_by, make_member(project, "owner")]

        def demote(i: int, project: Any = project, owners: Any = owners) -> str:
            try:
                set_member(user=owners[i], project=project, member=owners[1 - i], role="reader")
            except (Conflict, NotPermitted) as error:
                return type(error).__name__
            return "done"

        assert sorted(at_once(2, demote)) == ["NotPermitted", "done"]


def test_one_slug_or_user_name_asked_for_at_once_is_given_once() -> None:
    user = make_user()

    def make(_: int) -> str:
        try:
            create_project(user=user, slug="only-one", name="x")
        except Conflict:
            return "taken"
        return "made"

    def sign_up(_: int) -> str:
        try:
            create_user(username="only", password="a long enough phrase 9")
        except InvalidInput:
            return "taken"
        return "made"

    assert sorted(at_once(4, make)) == ["made", "taken", "taken", "taken"]
    assert sorted(at_once(4, sign_up)) == ["made", "taken", "taken", "taken"]
    assert chain_breaks() == []
