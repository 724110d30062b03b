"""The examples of the pages do what the pages say."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from kinetics_db.accounts.services import ensure_user
from kinetics_db.errors import Conflict
from kinetics_db.fits.models import FitResult
from kinetics_db.jobs.models import Job
from kinetics_db.provenance.models import AuditEntry
from tests.docs.fences import (
    DOCS,
    OVER_REST,
    blocks_in_docs,
    blocks_of,
    blocks_under,
    run_page,
    same_output,
)
from tests.factories.small import make_study
from tests.factories.tokens import make_token

TUTORIAL = DOCS / "tutorial" / "first-fit.md"
REST = DOCS / "reference" / "rest.md"


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


@pytest.mark.django_db
def test_the_tutorial_can_be_taken_up_again_in_a_new_shell_and_makes_nothing_twice() -> None:
    ensure_user(username="admin")
    first = run_page(TUTORIAL, after_each=do_waiting_work)
    entries = AuditEntry.objects.count()
    again = blocks_under(TUTORIAL, "Take it up again")
    whole = list(blocks_of(TUTORIAL))
    begin = whole.index(blocks_under(TUTORIAL, "The files")[0])
    second = run_page(TUTORIAL, blocks=[*again, *whole[begin:]])
    assert (second["fit_1"], second["fit_2"]) == (first["fit_1"], first["fit_2"])
    assert second["table_2"] == first["table_2"]
    assert AuditEntry.objects.count() == entries


@pytest.mark.django_db
def test_the_tutorials_materials_may_be_entered_again_and_its_project_may_not() -> None:
    ensure_user(username="admin")
    cupboard = blocks_under(TUTORIAL, "A project and what is in the cupboard")
    begun = [*blocks_under(TUTORIAL, "Before you begin"), *cupboard]
    names = run_page(TUTORIAL, blocks=begun)
    entries = AuditEntry.objects.count()
    with pytest.raises(Conflict, match="there is a project 'aminolysis' already"):
        run_page(TUTORIAL, blocks=begun)
    found, *rest = (block for block in cupboard if block.kind == "python")
    assert "create_project" in found.text
    taken_up = (
        "from kinetics_db.projects.selectors import project_named\n"
        "project = project_named(user=user, slug='aminolysis')\n"
    )
    second = run_page(TUTORIAL, blocks=[begun[0], replace(found, text=taken_up), *rest])
    assert second["flask"] == names["flask"]
    assert AuditEntry.objects.count() == entries


WITHOUT_DATABASE = [
    DOCS / "how-to" / "answer-a-failed-fit.md",
    DOCS / "how-to" / "use-the-engine-in-a-notebook.md",
    DOCS / "reference" / "instrument-files.md",
    DOCS / "reference" / "reductions.md",
]


@pytest.mark.parametrize("page", WITHOUT_DATABASE, ids=lambda page: page.name)
def test_a_page_about_the_engine_runs_without_a_database_and_prints_what_it_shows(page: Path) -> None:
    run_page(page)


@pytest.mark.django_db(transaction=True)
def test_scripts_of_the_rest_page_read_a_dataset_and_wait_for_a_fit(
    live_server: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    study = make_study()
    there = {
        "http://127.0.0.1:8765": live_server.url,
        "rw_...": make_token(study.user, scope="write")[1],
        "datasets/1/": f"datasets/{study.dataset.pk}/",
        "dataset=1": f"dataset={study.dataset.pk}",
        "mechanism_version=1": f"mechanism_version={study.version.pk}",
    }
    blocks = [block for block in blocks_of(REST) if block.kind == "python"]
    for shown, meant in there.items():
        assert any(shown in block.text for block in blocks), shown
        blocks = [replace(block, text=block.text.replace(shown, meant)) for block in blocks]
    monkeypatch.setattr("time.sleep", lambda seconds: do_waiting_work())
    names = run_page(REST, blocks=blocks)
    assert len(names["frame"]) == 48
    assert names["fit"]["state"] == "done" and names["constant"]["name"] == "k"


def test_no_page_with_python_is_left_out() -> None:
    assert {block.page for block in blocks_in_docs("python")} == {
        TUTORIAL,
        REST,
        *OVER_REST,
        *WITHOUT_DATABASE,
    }


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
