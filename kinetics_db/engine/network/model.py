"""A reaction network as plain values: species, steps, rate laws, observables.

Convention (IUPAC): for ``a A + b B --k--> c C`` the rate of reaction is v = k [A]^a [B]^b and
d[X]/dt = nu_X v. So ``2 A --k--> B`` gives d[A]/dt = -2 k [A]^2.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from kinetics_db.engine.network.expressions import Expression
from kinetics_db.errors import Problem

Side = tuple[tuple[str, float], ...]
"""Species of one side of a step with their stoichiometric numbers, in the order typed; () is `nothing`."""


@dataclass(frozen=True)
class Step:
    """One step. Exactly one of `constant` (mass action) and `law` (written out) is set.

    ``reverse_constant`` is set for a reversible mass-action step; its rate is
    ``reverse_constant`` times the product of [product]^nu.
    """

    reactants: Side
    products: Side
    constant: str | None
    reverse_constant: str | None = None
    law: Expression | None = None
    line: int = 0

    @property
    def reversible(self) -> bool:
        return self.reverse_constant is not None


@dataclass(frozen=True)
class Observable:
    """What an instrument sees: sum over terms of weight x [species]."""

    name: str
    terms: Side
    line: int = 0


@dataclass(frozen=True)
class Computed:
    """A constant computed from others, ``where name = expression``; may use T (K) but no concentration."""

    name: str
    expression: Expression
    line: int = 0


@dataclass(frozen=True)
class Network:
    """A parsed and checked mechanism.

    Attributes
    ----------
    species : tuple of str
        In order of first appearance in the text (steps, hold, observe).
    steps, held, observables, computed
        As written. ``held`` species keep their concentration.
    constants : tuple of str
        Every parameter that has to be given or fitted, in order of first appearance: those of steps, laws
        and `where` expressions, without the computed ones.
    text : str
        As typed.
    warnings : tuple of Problem
        What the checks had to say that does not stop.
    """

    species: tuple[str, ...]
    steps: tuple[Step, ...]
    held: tuple[str, ...] = ()
    observables: tuple[Observable, ...] = ()
    computed: tuple[Computed, ...] = ()
    constants: tuple[str, ...] = ()
    text: str = ""
    warnings: tuple[Problem, ...] = field(default=(), compare=False)

    def observable_terms(self, name: str) -> Side:
        """Terms of a declared observable, or the species of that name itself. KeyError when unknown."""
        for observable in self.observables:
            if observable.name == name:
                return observable.terms
        if name in self.species:
            return ((name, 1.0),)
        raise KeyError(name)

    @property
    def observable_names(self) -> tuple[str, ...]:
        """All names that data can be assigned to: declared observables, then species."""
        declared = tuple(o.name for o in self.observables)
        return declared + tuple(s for s in self.species if s not in declared)
