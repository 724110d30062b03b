"""The examples of the pages do what the pages say."""

from __future__ import annotations

from pathlib import Path

import pytest

from kinetics_db.accounts.services import ensure_user
from kinetics_db.fits.models import FitResult
from kinetics_db.jobs.models import Job
from tests.docs.fences import DOCS, blocks_in_docs, run_page, same_output

TUTORIAL = DOCS / "tutorial" / "first-fit.md"


def do_waiting_work() -> None:
    """What the worker of an installation does meanwhile."""
    from workers.tasks import run_job

    for job in Job.objects.filter(state=Job.State.WAITING):
        run_job(job.pk)


@pytest.mark.django_db
def test_the_tutorial_leads_from_files_to_verdicts() -> None:
    ensure_user(username="admin")
    names = run_page(TUTORIAL, after_each=do_waiting_work)
    assert names["job"].state == Job.State.DONE
    results = FitResult.objects.filter(fit__in=[names["fit_1"], names["fit_2"]])
    assert [r.status for r in results] == ["converged", "converged"]


WITHOUT_DATABASE = [
    DOCS / "how-to" / "answer-a-failed-fit.md",
    DOCS / "how-to" / "use-the-engine-in-a-notebook.md",
    DOCS / "reference" / "instrument-files.md",
    DOCS / "reference" / "reductions.md",
]


@pytest.mark.parametrize("page", WITHOUT_DATABASE, ids=lambda page: page.name)
def test_a_page_about_the_engine_runs_without_a_database_and_prints_what_it_shows(page: Path) -> None:
    run_page(page)


def test_no_page_with_python_is_left_out() -> None:
    assert {block.page for block in blocks_in_docs("python")} == {TUTORIAL, *WITHOUT_DATABASE}


@pytest.mark.parametrize(
    ("printed", "shown", "same"),
    [
        ("k = 1.000e-3 1/s\n", "k = 1.001e-3 1/s\n", True),
        ("k = 1.000e-3 1/s\n", "k = 1.000e-3 1/h\n", False),
        ("k = 1.000e-3 1/s\n", "k = 1.002e-3 1/s\n", False),
        ("0.0368\n", "0.0369\n", True),
        ("0.0368\n", "0.0371\n", False),
        ("12 rows\n", "13 rows\n", False),
        ("a 1 2\n", "a 1\n", False),
        ("a\nb\n", "a\n", False),
    ],
)
def test_outputs_are_compared_word_for_word_and_number_for_number(
    printed: str, shown: str, same: bool
) -> None:
    assert same_output(printed, shown) is same
