"""Bars that follow the rows of background jobs."""

from __future__ import annotations

import io
from collections.abc import Iterator
from pathlib import Path

import pytest

from kinetics_db.config.processes.failures import ChildDied
from kinetics_db.demo.invented.loading import ask_for_fits, load
from kinetics_db.demo.invented.reality import what_happened
from kinetics_db.demo.progress import follow, still_to_do, try_again
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import stop_fit
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import claim_job, fail_job, heartbeat
from tests.demo import another
from tests.factories.flow import compute_now
from tests.factories.people import make_user


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


@pytest.fixture
def fits(db: None) -> Iterator[list[Fit]]:
    user = make_user()
    loaded = load(another.PLAN, what_happened(another.PLAN, another.TRUTH, 7), another.RIVALS, user=user)
    yield ask_for_fits(another.PLAN, loaded, user=user)


def test_following_ends_when_every_fit_has_ended_with_a_line_for_each(fits: list[Fit]) -> None:
    undone = list(fits)
    looks: list[int] = []
    lines: list[str] = []

    def finish_one(_: float) -> None:
        compute_now(undone.pop(0))

    follow(
        fits,
        check=lambda: looks.append(1),
        say=lines.append,
        stream=io.StringIO(),
        sleep=finish_one,
    )
    assert len(looks) == len(fits) + 1
    assert [line.split(":")[0] for line in lines] == [
        "fit of 'by way of quinal v1'",
        "fit of 'both at once v1'",
    ]
    assert all(line.endswith(": converged") for line in lines)


def test_bars_are_drawn_on_a_terminal_only(fits: list[Fit]) -> None:
    for fit in fits:
        compute_now(fit)
    terminal, file = Terminal(), io.StringIO()
    for stream in (terminal, file):
        follow(fits, check=lambda: None, say=lambda _: None, stream=stream)
    assert "by way of quinal v1" in terminal.getvalue()
    assert "100 % |" in terminal.getvalue()
    assert file.getvalue() == ""


def test_a_bar_stands_where_the_job_stands(fits: list[Fit]) -> None:
    job = job_for(kind="fit", subject_id=fits[0].pk)
    Job.objects.filter(pk=job.pk).update(progress=0.4, message="iteration 5, cost 12.5")
    terminal = Terminal()

    def finish(_: float) -> None:
        for fit in fits:
            compute_now(fit)

    follow(fits, check=lambda: None, say=lambda _: None, stream=terminal, sleep=finish)
    assert "40 % |" in terminal.getvalue()
    assert "by way of quinal v1  waiting" in terminal.getvalue()


def test_a_running_fit_shows_its_iteration(fits: list[Fit]) -> None:
    claim = claim_job(job_for(kind="fit", subject_id=fits[0].pk).pk)
    assert claim is not None
    heartbeat(claim, progress=0.4, message="iteration 5, cost 12.5")
    terminal = Terminal()

    def end_both(_: float) -> None:
        fail_job(claim, reason="it cannot be done")
        compute_now(fits[1])

    lines: list[str] = []
    follow(fits, check=lambda: None, say=lines.append, stream=terminal, sleep=end_both)
    assert "by way of quinal v1  running: iteration 5" in terminal.getvalue()
    assert "fit of 'by way of quinal v1': it cannot be done" in lines


def test_the_death_of_a_child_ends_the_following(fits: list[Fit], tmp_path: Path) -> None:
    def check() -> None:
        raise ChildDied("The worker has died.", name="worker", log=tmp_path)

    with pytest.raises(ChildDied, match="worker has died"):
        follow(fits, check=check, say=lambda _: None, stream=Terminal())


def test_fits_that_an_earlier_start_has_computed_are_not_followed_again(fits: list[Fit]) -> None:
    known = {fit.pk for fit in fits}
    compute_now(fits[0])
    assert still_to_do(fits, known=known) == [fits[1]]
    # One that is asked for now and is done at once has still been computed now.
    assert still_to_do(fits, known={fits[1].pk}) == fits


def test_a_fit_that_was_stopped_is_tried_again_and_one_that_waits_is_left(fits: list[Fit]) -> None:
    user = fits[0].created_by
    stop_fit(user=user, fit=fits[0])
    assert job_for(kind="fit", subject_id=fits[0].pk).state == "stopped"
    try_again(fits, user=user)
    assert [job_for(kind="fit", subject_id=fit.pk).state for fit in fits] == ["waiting", "waiting"]
