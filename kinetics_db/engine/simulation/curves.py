"""What a simulation gives back: values, exact sensitivities and an outcome."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Status = Literal["done", "too many steps", "out of time", "failed"]


@dataclass(frozen=True)
class Outcome:
    """How an integration ended, and the work it took. Anything but 'done' carries the reason in `message`."""

    status: Status
    message: str = ""
    steps: int = 0
    rate_evaluations: int = 0
    jacobian_evaluations: int = 0
    reached: float = 0.0  # s, last time reached

    @property
    def ok(self) -> bool:
        return self.status == "done"


@dataclass(frozen=True, eq=False)
class Curves:
    """Concentrations over time.

    Attributes
    ----------
    times : ndarray, shape (n,), s
    species : tuple of str, length s
    values : ndarray, shape (n, s), mol/L (or the unit of the start values); NaN beyond `outcome.reached`
    parameters : tuple of str, length p
        What the sensitivities are with respect to: a constant's name, or ``[X]0`` for the start
        concentration of species X.
    sensitivities : ndarray, shape (n, s, p), d value / d parameter (plain, not logarithmic)
    outcome : Outcome
    observables : mapping name -> ((species, weight), ...) of the network's declared observables
    """

    times: NDArray[np.float64]
    species: tuple[str, ...]
    values: NDArray[np.float64]
    outcome: Outcome
    parameters: tuple[str, ...] = ()
    sensitivities: NDArray[np.float64] = field(default_factory=lambda: np.zeros((0, 0, 0)))
    observables: dict[str, tuple[tuple[str, float], ...]] = field(default_factory=dict)

    def weights(self, name: str) -> NDArray[np.float64]:
        """Weights over species of an observable or of a single species, shape (s,); KeyError when unknown."""
        terms = self.observables.get(name) or (((name, 1.0),) if name in self.species else None)
        if terms is None:
            raise KeyError(name)
        w = np.zeros(len(self.species))
        for species, weight in terms:
            w[self.species.index(species)] += weight
        return w

    def of(self, name: str) -> NDArray[np.float64]:
        """One species or observable over time, shape (n,)."""
        return np.asarray(self.values @ self.weights(name))

    def sensitivity_of(self, name: str) -> NDArray[np.float64]:
        """d(species or observable)/d(parameters), shape (n, p)."""
        return np.asarray(np.einsum("nsp,s->np", self.sensitivities, self.weights(name)))
