"""What somebody in an invented laboratory set out to do, and what is true there."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from kinetics_db.runs.entry import Amount


@dataclass(frozen=True)
class Substance:
    """A compound: molar mass in g/mol."""

    name: str
    molar_mass: float
    formula: str = ""


@dataclass(frozen=True)
class Bottle:
    """A lot: purity as a mass fraction with its standard uncertainty."""

    code: str
    substance: str
    purity: float
    purity_u: float


@dataclass(frozen=True)
class Solution:
    """A stock: one bottle's substance weighed in and made up to a volume."""

    code: str
    bottle: str
    weighed: Amount
    volume: Amount
    made_on: str = ""


@dataclass(frozen=True)
class Addition:
    """A weighed portion of a bottle or a pipetted volume of a solution, by its code."""

    source: str
    amount: Amount


@dataclass(frozen=True)
class PlannedRun:
    """One run and how its instrument exports it.

    Attributes
    ----------
    additions : in order
    times : s, as they will stand in the file
    layout : a name in `exports.LAYOUTS`
    gain : integral in a.u. of one mol/L of nuclei; every file is normalised differently
    missing : (row from 0, column) of cells that the instrument left empty
    """

    code: str
    celsius: float
    additions: tuple[Addition, ...]
    volume: Amount
    times: tuple[float, ...]
    layout: str
    gain: float
    missing: tuple[tuple[int, str], ...] = ()
    replicate_of: str = ""
    control_kind: str = ""
    started: str = ""
    notes: str = ""


@dataclass(frozen=True)
class Plan:
    """A whole invented project.

    Attributes
    ----------
    nuclei : integral column -> nuclei in that signal; the column is named after its substance or species
    standard : which of the columns is the internal standard; a substance, charged in every run
    noise : standard deviation of an integral, in mol/L of nuclei

    The standard is pipetted, and every run made up to its volume, with no error of its own: a recipe states one
    cause of the standard's error, its solution, which all runs that used it share.
    """

    slug: str
    name: str
    description: str
    substances: tuple[Substance, ...]
    bottles: tuple[Bottle, ...]
    solutions: tuple[Solution, ...]
    runs: tuple[PlannedRun, ...]
    nuclei: Mapping[str, float]
    standard: str
    noise: float

    def __post_init__(self) -> None:
        for run in self.runs:
            errors = [
                a.amount.uncertainty for a in run.additions if self.substance_of(a.source) == self.standard
            ]
            if errors != [0.0] or run.volume.uncertainty:
                raise ValueError(
                    f"run {run.code} needs one addition of {self.standard}, without an error of its own"
                )

    def substance(self, name: str) -> Substance:
        return next(s for s in self.substances if s.name == name)

    def bottle(self, code: str) -> Bottle | None:
        return next((b for b in self.bottles if b.code == code), None)

    def solution(self, code: str) -> Solution:
        return next(s for s in self.solutions if s.code == code)

    def substance_of(self, source: str) -> str:
        """Name of the substance in a bottle or solution."""
        bottle = self.bottle(source) or self.bottle(self.solution(source).bottle)
        if bottle is None:
            raise KeyError(source)
        return bottle.substance

    @property
    def signals(self) -> tuple[str, ...]:
        """Columns without the standard."""
        return tuple(column for column in self.nuclei if column != self.standard)


@dataclass(frozen=True)
class Truth:
    """What is true: a mechanism and its constants (mol/L, s) at each temperature in degC."""

    mechanism: str
    constants: Mapping[float, Mapping[str, float]]


@dataclass(frozen=True)
class Rival:
    """A mechanism somebody believes in, with the values they would start a fit from."""

    name: str
    text: str
    note: str
    starts: Mapping[str, float] = field(default_factory=dict)
