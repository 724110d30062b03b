"""What an entry would come to, while it is being typed."""

from __future__ import annotations

from dataclasses import dataclass

from kinetics_db.accounts.models import User
from kinetics_db.errors import Problem
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.runs.entry import RunEntry
from kinetics_db.runs.selectors import StartConcentration, start_concentrations
from kinetics_db.runs.services.cleaning import clean_what_can_be
from kinetics_db.runs.services.snapshot import resolve_what_can_be


@dataclass(frozen=True)
class Preview:
    """What can be computed of an entry, and what is still wrong with it.

    Attributes
    ----------
    starts : start concentrations of the charges that can be used, mol/L or percent as ``basis`` says
    basis : 'mol/L' or 'relative'
    volume, volume_u : L, with its standard uncertainty; None where it is not needed or not known
    assumed_additive : whether the volume is the sum of the charged volumes
    problems : what `log_run` would refuse, by field; an amount that no volume is known for is left out of starts
    """

    starts: tuple[StartConcentration, ...]
    basis: str
    volume: float | None
    volume_u: float | None
    assumed_additive: bool
    problems: tuple[Problem, ...]


def preview_entry(*, user: User, project_id: int, entry: RunEntry) -> Preview:
    """What an entry would come to; stores nothing and raises for nobody who may log runs.

    Raises
    ------
    NotFound, NotPermitted
        for strangers and readers.
    """
    require_contributor(user=user, project_id=project_id)
    clean, unclean = clean_what_can_be(entry)
    resolved, found = resolve_what_can_be(clean, project_id=project_id)
    told = {problem.field for problem in unclean}
    content = resolved.content
    volume = content["volume"] or {}
    return Preview(
        starts=start_concentrations(content),
        basis=content["basis"],
        volume=volume.get("value"),
        volume_u=volume.get("u"),
        assumed_additive=volume.get("assumed_additive", False),
        # What could not be stored reads as empty, which is no second problem.
        problems=(*unclean, *(problem for problem in found if problem.field not in told)),
    )
