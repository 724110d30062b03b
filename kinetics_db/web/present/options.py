"""How a file was read and reduced, in words: what a person stated, by the names that the forms use."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from kinetics_db.engine.recipes import AsReported, InternalStandard
from kinetics_db.engine.shown_numbers import plain

_OPTIONS = {
    "encoding": "text encoding", "delimiter": "columns are separated by", "decimal": "decimal sign",
    "comment_prefixes": "marks of comment lines", "header_line": "header in line", "columns": "columns are called",
    "time_column": "time is column", "time_unit": "unit of time", "time_format": "a time with one colon is",
    "units": "units", "ignored_columns": "not read", "sort_times": "rows put in the order of time",
}  # fmt: skip
_RECIPE = {
    "standard_concentration": "standard in the vessel / (mol/L)", "standard_relative_u": "its relative uncertainty",
    "standard_owner": "whose error that is", "noise_absolute": "noise of every signal",
    "noise_relative": "noise as a fraction", "repetition_time": "repetition time / s",
    "flip_angle": "flip angle / degrees", "seed": "seed of the draws", "draws": "draws for weak signals",
    "constant_u": "standard uncertainty of every value", "relative_u": "relative standard uncertainty",
    "scale_relative_u": "relative uncertainty common to all", "scale_owner": "whose error that is",
}  # fmt: skip
_SIGNAL = {
    "nuclei": "nuclei", "response_factor": "response factor", "response_relative_u": "its relative uncertainty",
    "t1": "T1 / s", "t1_u": "u(T1) / s", "saturation_relative_u": "relative uncertainty by saturation",
    "noise": "noise", "unit": "unit", "uncertainty_signal": "uncertainties in",
}  # fmt: skip
KINDS = {InternalStandard.kind: "against an internal standard", AsReported.kind: "as the file reports them"}


def options_in_words(options: Mapping[str, Any]) -> list[tuple[str, str]]:
    """(what, value) of the options that were stated for a file."""
    return [(_OPTIONS.get(name, name), _text(value)) for name, value in options.items()]


def recipe_in_words(recipe: Mapping[str, Any]) -> list[tuple[str, str]]:
    """(what, value) of a stored recipe, signal by signal."""
    found = [("concentrations", KINDS.get(recipe["kind"], recipe["kind"]))]
    if "standard" in recipe:
        found.append(("standard", _part(recipe["standard"])))
    found += [
        (words, _text(recipe[name])) for name, words in _RECIPE.items() if recipe.get(name) not in (None, 0.0)
    ]
    for part in (*recipe.get("signals", ()), *recipe.get("columns", ())):
        found.append((part["species"], _part(part)))
    return found


def _part(part: Mapping[str, Any]) -> str:
    said = [
        f"{words} {_text(part[name])}" for name, words in _SIGNAL.items() if part.get(name) not in (None, 0.0)
    ]
    of = f"{part['species']}, " if part["species"] != part["signal"] else ""
    return f"{of}signal '{part['signal']}'" + (": " + ", ".join(said) if said else "")


def _text(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int | float):
        return plain(float(value), digits=10)
    if isinstance(value, Mapping):
        return ", ".join(f"{name} in {unit}" for name, unit in value.items())
    return ", ".join(map(str, value)) if isinstance(value, list | tuple) else str(value)
