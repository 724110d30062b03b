"""*tern*: an invented project. A base opens an activated lactone with an alcohol, and water competes.

Substances, constants and errors are made up. The truth is known, so what comes out of the files can be
compared with it.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from kinetics_db.demo.invented.exports import export_file
from kinetics_db.demo.invented.in_memory import Problem, problem_of
from kinetics_db.demo.invented.loading import Loaded, Say, load
from kinetics_db.demo.invented.reality import Exported, what_happened
from kinetics_db.demo.tern.mechanisms import RIVALS
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.demo.tern.truth import MECHANISM, TRUTH

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

__all__ = ["SEED", "load_tern", "tern_problem", "write_files"]

SEED = 2026  # of the project that the demonstration shows


def write_files(folder: Path, *, seed: int = SEED) -> list[Exported]:
    """Write the export files of all runs into a folder; answers what the instrument had."""
    exports = what_happened(PLAN, TRUTH, seed)
    folder.mkdir(parents=True, exist_ok=True)
    for export in exports:
        name, data = export_file(export)
        (folder / name).write_bytes(data)
    return exports


def load_tern(*, user: User, seed: int = SEED, say: Say = lambda _: None) -> Loaded:
    """The project through the services; a second call uses what is there."""
    return load(PLAN, what_happened(PLAN, TRUTH, seed), RIVALS, user=user, say=say)


def tern_problem(seed: int, *, mechanism: str = MECHANISM) -> Problem:
    """The fit of a mechanism to all runs, from the same bytes, without a database."""
    return problem_of(PLAN, TRUTH, seed=seed, mechanism=mechanism)
