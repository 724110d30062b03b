"""What follows from a network: order of computation, orders of its constants, what has to be charged."""

from __future__ import annotations

from collections.abc import Iterable
from graphlib import TopologicalSorter

from kinetics_db.engine.network.model import Computed, Network, Side, Step
from kinetics_db.engine.network.syntax import parameters_of


def order_of(side: Side) -> float:
    """Overall order of a mass-action rate over a side, rounded so that 0.1 + 0.2 is 0.3."""
    return round(sum(number for _, number in side), 9)


def net_numbers(step: Step) -> dict[str, float]:
    """Net stoichiometric number of every species of a step; 0 for one that stands alike on both sides."""
    net: dict[str, float] = {}
    for name, number in step.reactants:
        net[name] = net.get(name, 0.0) - number
    for name, number in step.products:
        net[name] = net.get(name, 0.0) + number
    return net


def orders_of_constants(steps: Iterable[Step]) -> dict[str, tuple[float, ...]]:
    """Orders with which each mass-action constant is used; one each in a network that passed the checks."""
    orders: dict[str, list[float]] = {}
    for step in steps:
        for name, side in ((step.constant, step.reactants), (step.reverse_constant, step.products)):
            if name is not None:
                found = orders.setdefault(name, [])
                if (order := order_of(side)) not in found:
                    found.append(order)
    return {name: tuple(found) for name, found in orders.items()}


def computed_in_order(computed: Iterable[Computed]) -> tuple[Computed, ...]:
    """Computed constants so that each stands after those it uses.

    Raises
    ------
    graphlib.CycleError
        When they depend on each other in a circle; the checks refuse such a mechanism.
    """
    by_name = {one.name: one for one in computed}
    needs = {
        name: [other for other in parameters_of(one.expression) if other in by_name]
        for name, one in by_name.items()
    }
    return tuple(by_name[name] for name in TopologicalSorter(needs).static_order())


def must_be_charged(network: Network) -> tuple[str, ...]:
    """Species that no step forms, in the network's order: without a charge they stay at zero.

    A species that stands alike on both sides of every step, such as a catalyst, is not formed; nor is a held
    one, whose concentration is what was charged. A reversible step forms both of its sides.
    """
    formed: set[str] = set()
    for step in network.steps:
        for name, number in net_numbers(step).items():
            if number > 0 or (number < 0 and step.reversible):
                formed.add(name)
    return tuple(name for name in network.species if name not in formed or name in network.held)
