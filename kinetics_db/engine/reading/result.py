"""What a reader hands back."""

from __future__ import annotations

from dataclasses import dataclass

from kinetics_db.engine.tables import Table
from kinetics_db.errors import Problem


@dataclass(frozen=True)
class ReadResult:
    """A signal table and how the file was understood.

    Attributes
    ----------
    table : one 'time' column in s, and 'signal' columns in the units of the file; NaN is a missing cell
    notes : every interpretation that was made, in plain words, in the order of the file
    warnings : what a person should look at, with its line
    metadata : (key, value) pairs from comment lines and the lines above the header
    """

    table: Table
    notes: tuple[str, ...]
    warnings: tuple[Problem, ...] = ()
    metadata: tuple[tuple[str, str], ...] = ()
