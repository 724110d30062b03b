"""A fit as pages show it: how far it is or how it ended, its constants with intervals."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from kinetics_db.engine.shown_numbers import interval, plain
from kinetics_db.web.names import name_html
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.words import message_text, place_shown

if TYPE_CHECKING:
    from django.utils.safestring import SafeString

    from kinetics_db.fits.models import Fit, FitResult
    from kinetics_db.jobs.models import Job

_LEADING_NUMBER = re.compile(r"\d+(?:\.\d+)?")
ENDED_WITHOUT_RESULT = ("failed", "crashed")


@dataclass(frozen=True)
class ConstantSheet:
    """One fitted constant or start concentration."""

    name: SafeString
    where: Shown
    value: Shown
    interval: str
    remark: str


@dataclass(frozen=True)
class FitSheet:
    """One fit: how far it is, or what came out."""

    fit: Fit
    state: str
    message: str
    detail: str
    """how a fit came to its good end, which few will ask"""
    is_open: bool
    progress: float
    confidence: str
    constants: Sequence[ConstantSheet]
    points: int | None
    seconds: str

    @property
    def has_remarks(self) -> bool:
        """Whether there is anything to say about any constant."""
        return any(constant.remark for constant in self.constants)


def fit_sheet(
    fit: Fit, job: Job | None, result: FitResult | None, contents: Mapping[int, dict[str, Any]]
) -> FitSheet:
    """One fit by its job, its result and the results' contents by id."""
    content = contents.get(result.pk, {}) if result is not None else {}
    is_open = job is not None and job.state in job.OPEN
    if job is not None and (is_open or result is None or job.state in ENDED_WITHOUT_RESULT):
        state, message = str(job.state), job.message
    elif result is not None:
        state, message = str(result.status), content.get("message", "")
    else:
        state, message = "not asked for", ""
    parameters = [
        p for p in content.get("parameters", ()) if p["kind"] in ("constant", "start concentration")
    ]
    confidence = content.get("confidence")
    message = message_text(message)
    ended_well = state == "converged"
    return FitSheet(
        fit=fit,
        state=state,
        message="" if ended_well else message,
        detail=message if ended_well else "",
        is_open=is_open,
        progress=job.progress if job is not None else 0.0,
        confidence=f"{100 * confidence:.4g} %" if confidence else "",
        constants=[_constant(p) for p in in_order(parameters)],
        points=content.get("points"),
        seconds=plain(result.seconds, "s", digits=3) if result is not None else "",
    )


def in_order(parameters: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Constants in the order of the mechanism, each with its places by number ('288.15 K' before '298.15 K')."""
    bases = list(dict.fromkeys(p["base"] for p in parameters))

    def key(p: Mapping[str, Any]) -> tuple[int, float, str]:
        place = p["place"] or ""
        number = _LEADING_NUMBER.match(place)
        return bases.index(p["base"]), float(number[0]) if number else math.inf, place

    return sorted(parameters, key=key)


def _constant(p: Mapping[str, Any]) -> ConstantSheet:
    unit = p["unit"]
    if p["determined"]:
        value, limits = shown(p["value"], p["standard_error"], unit), interval(p["lower"], p["upper"], unit)
    else:
        value, limits = (
            Shown("not determined", f"{p['value']!r} {unit}, where the fit ended", repr(p["value"])),
            interval(None, None),
        )
    remarks = []
    if not p["determined"] and p["why_not"]:
        remarks.append(p["why_not"])
    if p["at_bound"]:
        remarks.append("pushed against its bound")
    if p["set_by_prior"]:
        remarks.append("set by its prior")
    return ConstantSheet(
        name_html(p["base"]), place_shown(p["place"] or ""), value, limits, "; ".join(remarks)
    )
