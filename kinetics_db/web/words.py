"""Words of the record as a page writes them: names of datasets, messages of the engine, places of constants."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from kinetics_db.engine.shown_numbers import PAGE
from kinetics_db.web.numbers import Shown, shown
from kinetics_db.web.present.units import ZERO_CELSIUS

if TYPE_CHECKING:
    from kinetics_db.datasets.models import Dataset

_LOG_LIKELIHOOD = re.compile(r"(?<![\w-])-2 ln L\b")
_POWER_OF_TEN = re.compile(r"(?<![\w.-])(\d(?:\.\d+)?)e([+-])(\d\d+)\b")
_KELVIN = re.compile(r"\d+(?:\.\d+)? K")


def dataset_text(dataset: Dataset) -> str:
    """The name in quotes with its version, so that it reads apart from the words around it."""
    return f"dataset '{dataset.name}', version {dataset.number}"


def message_text(message: str) -> str:
    """A message of the engine in the letters of a page: a true minus sign, powers of ten written out."""
    message = _LOG_LIKELIHOOD.sub(f"{PAGE.minus}2 ln L", message)
    return _POWER_OF_TEN.sub(_written_out, message)


def place_shown(place: str) -> Shown:
    """Where a constant counts; a temperature in °C as at the runs, copying gives K."""
    if not _KELVIN.fullmatch(place):
        return Shown(place or "all runs")
    kelvin = float(place.split()[0])
    return Shown(shown(round(kelvin - ZERO_CELSIUS, 6), unit="°C", digits=5).text, place, repr(kelvin))


def _written_out(found: re.Match[str]) -> str:
    return found[1] + PAGE.power_of_ten(int(found[2] + found[3]))
