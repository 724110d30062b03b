"""The conditions of a run that rate laws can depend on."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Conditions:
    """Conditions held during a run.

    Attributes
    ----------
    temperature : float or None, K
        None when unknown; a law or `where` that uses T then cannot be simulated.
    """

    temperature: float | None = None
