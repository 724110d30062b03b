"""Verdicts on one run as its page shows them: the newest of each model on each dataset."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from kinetics_db.engine.shown_numbers import percent, plain, probability
from kinetics_db.evidence.explanations import Explanation, Explanations, Version
from kinetics_db.web.present.grid import css_of

STOPPED = "stopped"


@dataclass(frozen=True)
class ExplanationLine:
    """One verdict with its reasons in words, and its class in the style sheet."""

    found: Explanation
    css: str
    reasons: Sequence[str]


@dataclass(frozen=True)
class ExplanationList:
    """Verdicts newest first, after them those of stopped fits; ``earlier`` counts what is not shown beside them."""

    lines: Sequence[ExplanationLine]
    earlier: int
    untried: Sequence[Version]
    more: bool


def explanation_list(explanations: Explanations) -> ExplanationList:
    """The newest verdict of each version on each dataset's table of the run; a finished fit before a stopped one."""
    newest: dict[tuple[int, int, int], Explanation] = {}
    for found in sorted(explanations.verdicts, key=lambda one: one.fit_status == STOPPED):
        newest.setdefault((found.version.id, found.dataset_id, found.table_id), found)
    lines = [ExplanationLine(found, css_of(found.verdict), _reasons(found)) for found in newest.values()]
    return ExplanationList(
        lines, len(explanations.verdicts) - len(lines), explanations.untried, explanations.more
    )


def _reasons(found: Explanation) -> list[str]:
    reasons = []
    if found.observable:
        reasons.append(f"{found.observable}: p {probability(found.p_value)}, NRMSE {percent(found.nrmse)}")
    if found.pull is not None and found.verdict == "strained":
        sign = "+" if found.pull > 0 else ""
        reasons.append(f"farthest pull: {found.pull_name} {sign}{plain(found.pull, digits=3)} u")
    if found.fit_status != "converged":
        reasons.append(f"the fit is {found.fit_status}")
    return reasons
