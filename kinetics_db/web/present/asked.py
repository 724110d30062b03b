"""What a fit was asked to do, in words: casting, constants, settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from kinetics_db.engine.shown_numbers import interval, plain
from kinetics_db.web.names import name_html

if TYPE_CHECKING:
    from django.utils.safestring import SafeString


@dataclass(frozen=True)
class AskedConstant:
    """One constant or start concentration as it was asked for."""

    name: SafeString
    scope: str
    start: str
    bounds: str
    prior: str


@dataclass(frozen=True)
class Asked:
    """The whole request."""

    constants: Sequence[AskedConstant]
    compounds: Sequence[tuple[str, str]]
    columns: Sequence[tuple[str, str]]
    settings: Sequence[tuple[str, str]]
    without: Sequence[str]


def asked_of(content: Mapping[str, Any]) -> Asked:
    """A fit's content (`fits.request.FitRequest.to_plain`) in words."""
    chosen = content["settings"]
    starts = [{**start, "name": f"[{start['species']}]0"} for start in content["start_concentrations"]]
    settings = [
        ("uncertainty of the points", chosen["error_model"]),
        ("confidence of the intervals", f"{100 * chosen['confidence']:.4g} %"),
        ("starts", f"{chosen['starts']}" + _spread(chosen)),
        ("at most", f"{plain(chosen['max_seconds'], 's')}, {chosen['max_iterations']} iterations a start"),
        ("integration", f"relative tolerance {plain(chosen['rtol'])}, at most {chosen['max_steps']} steps"),
    ]
    return Asked(
        constants=[_constant(entry) for entry in (*content["constants"], *starts)],
        compounds=_parts(content["casting"]["compounds"]),
        columns=_parts(content["casting"]["columns"]),
        settings=settings,
        without=content["without_owners"],
    )


def _spread(chosen: Mapping[str, Any]) -> str:
    if chosen["starts"] == 1:
        return ""
    return f", the further ones within {chosen['start_spread']:g}-fold, seed {chosen['seed']}"


def _parts(casting: Mapping[str, str | None]) -> list[tuple[str, str]]:
    return [(name, target or "plays no part") for name, target in casting.items()]


def _constant(entry: Mapping[str, Any]) -> AskedConstant:
    scope = entry["scope"] + (f" by {entry['group_by']}" if entry.get("group_by") else "")
    own = "; ".join(f"{place}: {plain(value)}" for place, value in entry.get("starts", {}).items())
    lower, upper, prior = entry["lower"], entry["upper"], entry["prior"]
    bounds = "" if lower is None and upper is None else interval(lower, upper)
    if not entry.get("positive", True):
        bounds = f"{bounds}, may be negative".lstrip(", ")
    return AskedConstant(
        name=name_html(entry["name"]),
        scope=scope,
        start=plain(entry["start"]) + (f" ({own})" if own else ""),
        bounds=bounds,
        prior=f"{plain(prior['mean'])}, sd {plain(prior['sd'])}" if prior else "",
    )
