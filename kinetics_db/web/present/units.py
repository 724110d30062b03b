"""The units that a project's numbers are shown in, chosen once for the whole page so that runs can be compared."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from kinetics_db.engine.units import convert

PERCENT = "%"
ZERO_CELSIUS = 273.15  # K


@dataclass(frozen=True)
class Units:
    """Units of concentrations (of absolute ones; relative ones are always percentages) and times."""

    concentration: str
    time: str

    def concentration_of(self, basis: str) -> str:
        """The unit to show for tables and runs of that basis, 'mol/L' or 'relative'."""
        return self.concentration if basis == "mol/L" else PERCENT


def units_for(*, concentrations: Iterable[float], durations: Iterable[float]) -> Units:
    """Units in which the largest of the numbers (mol/L, s) is neither tiny nor huge."""
    largest = max(concentrations, default=0.0)
    longest = max(durations, default=0.0)
    concentration = "mol/L" if largest >= 2.0 else "mmol/L" if largest >= 5e-4 or largest <= 0 else "µmol/L"
    time = "s" if longest <= 300 else "min" if longest <= 4 * 3600 else "h" if longest <= 5 * 86400 else "d"
    return Units(concentration, time)


def factor(unit: str, to: str) -> float:
    """What a number in ``unit`` is multiplied by."""
    return float(convert(1.0, unit, to))
