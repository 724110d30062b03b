"""Follows background fits by their job rows and shows how far they are."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Collection, Sequence
from typing import TYPE_CHECKING, TextIO

from tqdm import tqdm

from kinetics_db.fits.services import retry_fit
from kinetics_db.jobs.selectors import job_for, jobs_for

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.fits.models import Fit

OPEN = ("waiting", "running")
ENDED_BADLY = ("stopped", "failed", "crashed")
SECONDS_BETWEEN_LOOKS = 0.3
NAME_WIDTH = 40


def try_again(fits: Sequence[Fit], *, user: User) -> None:
    """Put fits of an earlier start that stopped, failed or crashed back in the queue."""
    for fit in fits:
        if job_for(kind="fit", subject_id=fit.pk).state in ENDED_BADLY:
            retry_fit(user=user, fit=fit)


def still_to_do(fits: Sequence[Fit], *, known: Collection[int]) -> list[Fit]:
    """Fits that are asked for now or not done yet; ``known`` are the ids of those asked for before."""
    jobs = jobs_for(kind="fit", subject_ids=[fit.pk for fit in fits])
    return [fit for fit in fits if fit.pk not in known or jobs[fit.pk].state != "done"]


def follow(
    fits: Sequence[Fit],
    *,
    check: Callable[[], None],
    say: Callable[[str], None],
    stream: TextIO | None = None,
    sleep: Callable[[float], None] = time.sleep,
) -> None:
    """Show a bar for each fit until every job has ended; a line for each end.

    ``check`` is called between looks and may raise, for instance when a worker has died. Bars are drawn only
    where ``stream`` (the terminal) is one.
    """
    stream = stream or sys.stderr
    names = {fit.pk: _name(fit) for fit in fits}
    bars = {
        fit.pk: tqdm(
            total=100,
            desc=names[fit.pk],
            position=i,
            leave=False,
            file=stream,
            disable=not stream.isatty(),
            bar_format="  {percentage:3.0f} % |{bar:20}| {desc}",
        )
        for i, fit in enumerate(fits)
    }
    waiting = list(names)
    try:
        while waiting:
            check()
            jobs = jobs_for(kind="fit", subject_ids=waiting)
            for fit_id in list(waiting):
                job, bar = jobs[fit_id], bars[fit_id]
                bar.n = round(100 * job.progress)
                bar.set_description_str(f"{names[fit_id]}  {_now(job.state, job.message)}")
                if job.state not in OPEN:
                    waiting.remove(fit_id)
                    with tqdm.external_write_mode(file=stream):
                        say(f"fit of '{names[fit_id]}': {_end(job.state, job.message)}")
            if waiting:
                sleep(SECONDS_BETWEEN_LOOKS)
    finally:
        for bar in bars.values():
            bar.close()


def _end(state: str, message: str) -> str:
    """'converged' is all that a good end needs; any other comes with its reason."""
    return "converged" if message.startswith("converged:") else message or state


def _now(state: str, message: str) -> str:
    """'waiting', 'running: iteration 3', ...; the first part of the worker's message is enough for a bar."""
    short = message.split(",")[0][:24]
    return f"{state}: {short}" if state == "running" and short else state


def _name(fit: Fit) -> str:
    name = str(fit.mechanism_version)
    return name if len(name) <= NAME_WIDTH else name[: NAME_WIDTH - 3] + "..."
