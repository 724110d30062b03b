"""The how-to pages over REST, run as they stand against a real server: Python, shell, and (slow) R."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import pytest
from django.core.cache import cache

from kinetics_db.accounts.selectors import user_named
from kinetics_db.accounts.services import ensure_user
from kinetics_db.measurements.selectors import tables_of_run
from kinetics_db.projects.selectors import project_named
from kinetics_db.runs.selectors import run_named
from tests.docs.fences import DOCS, OVER_REST, Block, blocks_of, blocks_under, run_page
from tests.factories.tokens import make_token

LOG, PULL = DOCS / "how-to" / "log-a-run.md", DOCS / "how-to" / "pull-a-data-set.md"
TUTORIAL = DOCS / "tutorial" / "first-fit.md"
UP_TO_THE_DATASET = (
    "Before you begin",
    "A project and what is in the cupboard",
    "The runs",
    "The files",
    "From signals to concentrations",
    "Two ideas of how it goes",
)


@pytest.fixture
def server(transactional_db: None, live_server: Any, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """A server at RW_ADDRESS for the person 'admin'."""
    cache.clear()  # counts of requests
    ensure_user(username="admin")
    monkeypatch.setenv("RW_ADDRESS", live_server.url)
    yield
    cache.clear()


def log_in(monkeypatch: pytest.MonkeyPatch, *, scope: str) -> None:
    monkeypatch.setenv("RW_TOKEN", make_token(user_named("admin"), scope=scope)[1])


def shell(block: Block) -> str:
    """What a block prints; the lines that a person fills in are set by the test."""
    lines = [line for line in block.text.splitlines() if not line.startswith("export RW_")]
    return ran(["bash", "-euo", "pipefail", "-c", "\n".join(lines)], block)


def ran(command: list[str], block: Block) -> str:
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=120)
    assert done.returncode == 0, f"{block}: {done.stderr}"
    return done.stdout


def test_a_run_is_logged_over_rest_as_the_page_says(server: None, monkeypatch: pytest.MonkeyPatch) -> None:
    log_in(monkeypatch, scope="write")
    names = run_page(LOG, others={"sh": shell})
    names["lab"].close()
    admin = user_named("admin")
    project = project_named(user=admin, slug="hydrolysis")
    run = run_named(user=admin, project_id=project.pk, code="K01")
    (table,) = tables_of_run(user=admin, run=run)
    assert run.sealed and table.table.names("concentration") == ("ester", "alcohol")


@pytest.fixture
def dataset(server: None, monkeypatch: pytest.MonkeyPatch) -> Any:
    """The data set of the tutorial, and a token that may read."""
    begun = [block for heading in UP_TO_THE_DATASET for block in blocks_under(TUTORIAL, heading)]
    found = run_page(TUTORIAL, blocks=begun)["dataset"]
    monkeypatch.setenv("RW_DATASET", str(found.pk))
    log_in(monkeypatch, scope="read")
    return found


def test_a_data_set_is_pulled_with_python_as_the_page_says(
    dataset: Any, monkeypatch: pytest.MonkeyPatch, tmp_path: Any
) -> None:
    monkeypatch.chdir(tmp_path)
    # What R prints is compared where R is run.
    blocks = [block for block in blocks_of(PULL) if block not in of_r()]
    names = run_page(PULL, blocks=blocks, others={"sh": shell})
    assert names["token"]["scope"] == "read" and len(names["frame"]) == 48
    assert (tmp_path / "amine.parquet").read_bytes()[:4] == b"PAR1"


@pytest.mark.slow
def test_a_data_set_is_pulled_with_r_as_the_page_says(dataset: Any) -> None:
    rscript = shutil.which("Rscript")
    assert rscript, "Rscript is not on the path; it comes with R (apt install r-base-core, brew install r)"
    run_page(PULL, blocks=of_r(), others={"r": lambda block: ran([rscript, "-e", block.text], block)})


def of_r() -> list[Block]:
    blocks = blocks_under(PULL, "R")
    assert [block.kind for block in blocks] == ["r", "text"]
    return blocks


def test_a_page_whose_output_is_not_the_one_shown_is_told(
    dataset: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    wrong = [replace(b, text=b.text.replace("of 2 tables", "of 3 tables")) for b in blocks_of(PULL)]
    with pytest.raises(AssertionError, match=r"pull-a-data-set\.md:\d+: printed"):
        run_page(PULL, blocks=[b for b in wrong if b.kind in ("python", "text")][:4])


def test_every_command_of_these_pages_is_run_by_a_test() -> None:
    kinds = {page.name: {block.kind for block in blocks_of(page)} for page in OVER_REST}
    assert kinds == {LOG.name: {"sh", "python", "text"}, PULL.name: {"sh", "python", "text", "r"}}
