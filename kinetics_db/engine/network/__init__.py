"""Reaction networks: the text notation, its checks, its canonical form, and what follows from a network."""

from kinetics_db.engine.network.canonical_form import canonical_form, mechanism_digest, same_network
from kinetics_db.engine.network.derived import computed_in_order, must_be_charged, orders_of_constants
from kinetics_db.engine.network.model import Computed, Network, Observable, Side, Step
from kinetics_db.engine.network.notation import parse_mechanism
from kinetics_db.engine.network.units_of_constants import constant_units, unit_of_order
from kinetics_db.engine.network.writer import write

__all__ = [
    "Computed",
    "Network",
    "Observable",
    "Side",
    "Step",
    "canonical_form",
    "computed_in_order",
    "constant_units",
    "mechanism_digest",
    "must_be_charged",
    "orders_of_constants",
    "parse_mechanism",
    "same_network",
    "unit_of_order",
    "write",
]
