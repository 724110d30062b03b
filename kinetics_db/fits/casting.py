"""Which compound or column of the data plays which species or observable of the mechanism."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from kinetics_db.engine.network import Network
from kinetics_db.errors import InvalidInput, Problem


@dataclass(frozen=True)
class Casting:
    """Both maps are complete: None says in so many words that a compound or column plays no part."""

    compounds: Mapping[str, str | None]
    columns: Mapping[str, str | None]

    def to_plain(self) -> dict[str, dict[str, str | None]]:
        """As it stands in a fit's request."""
        return {"compounds": dict(self.compounds), "columns": dict(self.columns)}

    @classmethod
    def from_plain(cls, plain: Mapping[str, Mapping[str, str | None]]) -> Casting:
        """Inverse of `to_plain`."""
        return cls(dict(plain["compounds"]), dict(plain["columns"]))


def propose_casting(network: Network, *, compounds: Sequence[str], columns: Sequence[str]) -> Casting:
    """Cast by equal names; whatever has no namesake is left open (absent), for a person to decide."""
    return Casting(
        {name: name for name in compounds if name in network.species},
        {name: name for name in columns if name in network.observable_names},
    )


def complete_casting(
    network: Network, casting: Casting, *, compounds: Sequence[str], columns: Sequence[str]
) -> Casting:
    """The proposal overridden by what was given, checked to be complete; InvalidInput names every gap."""
    proposal = propose_casting(network, compounds=compounds, columns=columns)
    by_compound = {**proposal.compounds, **casting.compounds}
    by_column = {**proposal.columns, **casting.columns}
    problems = [
        *_gaps("compound", compounds, by_compound, network.species),
        *_gaps("column", columns, by_column, network.observable_names),
    ]
    taken = [target for target in by_column.values() if target is not None]
    for target in sorted({t for t in taken if taken.count(t) > 1}):
        problems.append(
            Problem(
                f"two columns are cast as '{target}'",
                field="casting.columns",
                cure="one column an observable",
            )
        )
    for observable in network.observables:
        if observable.name not in taken:
            problems.append(
                Problem(
                    f"no column is assigned to the observable '{observable.name}'",
                    field="casting.columns",
                    cure="assign a column, or take the observable out of the mechanism",
                )
            )
    if not taken:
        problems.append(
            Problem("no column is cast as anything", field="casting.columns", cure="at least one")
        )
    if problems:
        raise InvalidInput(problems)
    return Casting(
        {name: by_compound[name] for name in compounds},
        {name: by_column[name] for name in columns},
    )


def _gaps(
    what: str, names: Sequence[str], chosen: Mapping[str, str | None], targets: Sequence[str]
) -> list[Problem]:
    found = []
    for name in names:
        field = f"casting.{what}s.{name}"
        if name not in chosen:
            near = difflib.get_close_matches(name, targets, n=2, cutoff=0.5)
            hint = f"did you mean {' or '.join(repr(n) for n in near)}? " if near else ""
            found.append(
                Problem(
                    f"the {what} '{name}' is not assigned",
                    field=field,
                    cure=f"{hint}assign one of {', '.join(targets)}, or null to leave it out",
                )
            )
        elif chosen[name] is not None and chosen[name] not in targets:
            found.append(
                Problem(
                    f"the {what} '{name}' is cast as '{chosen[name]}', which the mechanism does not have",
                    field=field,
                    cure=f"one of {', '.join(targets)}",
                )
            )
    for name in chosen:
        if name not in names:
            found.append(
                Problem(
                    f"the casting names the {what} '{name}', which the data do not have",
                    field=f"casting.{what}s",
                )
            )
    return found
