"""What a container or a supervisor is told about a process that it watches."""

from __future__ import annotations

import os
import time
from pathlib import Path

import pytest

from kinetics_db.config import health


def ask(what: str, capsys: pytest.CaptureFixture[str]) -> tuple[int, str]:
    status = health.main([what])
    said = capsys.readouterr()
    return status, (said.out + said.err).strip()


@pytest.fixture
def swept(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Path:
    monkeypatch.setenv("RATEWRIGHT_VAR", str(tmp_path / "var"))
    monkeypatch.delenv("RATEWRIGHT_JOB_SWEEP_SECONDS", raising=False)
    return tmp_path / "var" / "swept"


def test_a_sweeper_that_swept_just_now_is_well(swept: Path, capsys: pytest.CaptureFixture[str]) -> None:
    health.note_sweep()
    assert ask("sweeps", capsys) == (0, "the last sweep was 0 s ago")


def test_a_sweeper_that_has_not_swept_for_a_minute_is_not(
    swept: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    health.note_sweep()
    os.utime(swept, (time.time() - 65, time.time() - 65))
    assert ask("sweeps", capsys) == (1, "the last sweep was 65 s ago")


def test_a_sweeper_with_long_pauses_gets_more_time(
    swept: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("RATEWRIGHT_JOB_SWEEP_SECONDS", "10")
    health.note_sweep()
    os.utime(swept, (time.time() - 65, time.time() - 65))
    assert ask("sweeps", capsys)[0] == 0


def test_a_sweeper_that_never_swept_is_not_well(swept: Path, capsys: pytest.CaptureFixture[str]) -> None:
    status, said = ask("sweeps", capsys)
    assert status == 1 and said.startswith("no sweep was noted: ")


def test_sweeping_goes_on_where_it_cannot_be_noted(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").touch()
    monkeypatch.setenv("RATEWRIGHT_VAR", str(tmp_path / "file" / "below"))
    health.note_sweep()
    assert (tmp_path / "file").is_file()


@pytest.mark.django_db
def test_every_sweep_is_noted(swept: Path) -> None:
    from workers.tasks import sweep_jobs

    sweep_jobs()
    assert swept.exists()


def test_a_worker_whose_queue_is_away_is_not_well(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("RATEWRIGHT_BROKER_URL", "redis+socket:///nowhere/queue.sock?virtual_host=0")
    status, said = ask("worker", capsys)
    assert status == 1 and "the queue does not answer" in said


@pytest.mark.parametrize(
    ("name", "value", "said"),
    [
        ("RATEWRIGHT_HOSTS", "", "set RATEWRIGHT_HOSTS"),
        ("RATEWRIGHT_BIND", "unix:/run/web.sock", "it takes an address and a port"),
    ],
)
def test_an_environment_that_cannot_be_used_is_named(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, name: str, value: str, said: str
) -> None:
    monkeypatch.setattr("kinetics_db.config.gunicorn.bind", "127.0.0.1:8000")
    monkeypatch.setenv(name, value)
    if name == "RATEWRIGHT_BIND":
        monkeypatch.setattr("kinetics_db.config.gunicorn.bind", value)
    status, answer = ask("web", capsys)
    assert status == 1 and said in answer


@pytest.mark.parametrize("arguments", [[], ["queue"], ["web", "worker"]])
def test_something_else_is_asked_back(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert health.main(arguments) == 2
    assert "say what to ask: web, worker, sweeps" in capsys.readouterr().err
