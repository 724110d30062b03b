"""A POST that is sent twice is done once."""

from __future__ import annotations

import threading
from typing import Any

import pytest
from django.db import connections

from api import runs
from kinetics_db.accounts.models import IdempotencyKey
from kinetics_db.projects.models import Project
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.runs.models import Run
from tests.api.conftest import Lab, Script, problem


def test_the_same_request_gets_its_first_answer(lab: Lab) -> None:
    first = lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1")
    again = lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1")
    assert first.status_code == again.status_code == 201
    assert again.json() == first.json()
    for name in ("Location", "ETag", "Content-Type"):
        assert again[name] == first[name]
    assert "Idempotency-Replayed" not in first and again["Idempotency-Replayed"] == "true"
    assert Run.objects.count() == 1


def test_the_order_of_names_in_a_body_does_not_matter(lab: Lab) -> None:
    lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1")
    turned = dict(reversed(lab.entry().items()))
    assert lab.script.post("runs/", turned, Idempotency_Key="k-1").status_code == 201


def test_another_body_or_address_under_the_same_key_is_refused(lab: Lab) -> None:
    lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1")
    for path, body in (
        ("runs/", lab.entry("K02")),
        ("projects/", {"slug": "new-one", "name": "New"}),
    ):
        (found,) = problem(lab.script.post(path, body, Idempotency_Key="k-1"), 422)["problems"]
        assert found["field"] == "Idempotency-Key" and "another request" in found["message"]
    assert Run.objects.count() == Project.objects.count() == 1


def test_a_token_of_other_limits_does_not_get_the_answer(lab: Lab) -> None:
    lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1")
    limited = lab.script_of(lab.owner, "limited", scope="write", project="hydrolysis")
    problem(limited.post("runs/", lab.entry(), Idempotency_Key="k-1"), 422)


def test_without_a_key_a_request_is_done_each_time(lab: Lab) -> None:
    for _ in range(2):
        lab.script.post("projects/hydrolysis/compounds/", {"name": "acid", "molar_mass": 60})
    assert not IdempotencyKey.objects.exists()


def test_a_refused_request_leaves_no_key_and_may_be_mended(lab: Lab) -> None:
    problem(lab.script.post("runs/", lab.entry(charges=[]), Idempotency_Key="k-1"), 422)
    assert not IdempotencyKey.objects.exists()
    assert lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1").status_code == 201


def test_a_crash_leaves_neither_the_write_nor_the_key(lab: Lab, monkeypatch: pytest.MonkeyPatch) -> None:
    def crash(*args: object) -> None:
        raise ZeroDivisionError

    before = AuditEntry.objects.count()
    lab.script.client.raise_request_exception = False
    with monkeypatch.context() as patched:
        patched.setattr(runs, "run_etag", crash)  # after the write, before the answer
        problem(lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1"), 500)
    assert not Run.objects.exists() and not IdempotencyKey.objects.exists()
    assert AuditEntry.objects.count() == before
    assert lab.script.post("runs/", lab.entry(), Idempotency_Key="k-1").status_code == 201


@pytest.mark.parametrize("key", ["", " ", "two words", "x" * 256, "ü", "a\tb"])
def test_a_key_that_is_none_is_refused(lab: Lab, key: str) -> None:
    response = lab.script.post("runs/", lab.entry(), Idempotency_Key=key)
    assert problem(response, 422)["problems"][0]["field"] == "Idempotency-Key"


def test_a_secret_is_not_kept_with_a_key(lab: Lab) -> None:
    lab.script.client.force_login(lab.owner)
    script = Script(client=lab.script.client)
    body = {"name": "more", "scope": "read", "expires": "2027-01-01T00:00:00Z"}
    secret = script.post("tokens/", body, Idempotency_Key="k-1").json()["secret"]
    assert secret.startswith("rw_") and not IdempotencyKey.objects.exists()


@pytest.mark.django_db(transaction=True)
def test_two_at_once_are_done_once() -> None:
    lab = Lab.fresh()
    answers: list[Any] = []
    start = threading.Barrier(4)

    def send() -> None:
        start.wait()
        answers.append(Script(lab.script.secret).post("runs/", lab.entry(), Idempotency_Key="k-1"))
        connections.close_all()

    threads = [threading.Thread(target=send) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [a.status_code for a in answers] == [201] * 4, [a.content for a in answers]
    assert len({a.content for a in answers}) == 1
    assert sorted("Idempotency-Replayed" in a for a in answers) == [False, True, True, True]
    assert Run.objects.count() == 1
