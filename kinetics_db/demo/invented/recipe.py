"""The recipe that somebody would state for a run's file."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from kinetics_db.demo.invented.plan import Plan, PlannedRun


def recipe_of(
    plan: Plan, run: PlannedRun, start: Sequence[Mapping[str, Any]], noise: float
) -> dict[str, Any]:
    """Against the internal standard, whose concentration and uncertainty the run's charges give.

    ``start`` is that of the run's revision; ``noise`` of an integral in a.u.
    """
    (charged,) = (part for part in start if part["compound"] == plan.standard)
    solution = next(a.source for a in run.additions if plan.substance_of(a.source) == plan.standard)

    def signal(column: str) -> dict[str, Any]:
        return {"signal": column, "species": column, "nuclei": plan.nuclei[column]}

    return {
        "kind": "internal standard",
        "standard": signal(plan.standard),
        "standard_concentration": charged["concentration"],
        "standard_relative_u": math.hypot(*(error["relative_u"] for error in charged["shared"])),
        "standard_owner": f"stock {solution}",
        "signals": [signal(column) for column in plan.signals],
        "noise_absolute": noise,
    }


def stated_noise(noise: float) -> float:
    """The noise as the files and their readers state it, to four digits."""
    return float(f"{noise:.4g}")
