"""A network answers which names data can be assigned to."""

from __future__ import annotations

import pytest

from kinetics_db.engine.network import parse_mechanism

NETWORK = parse_mechanism("A --k--> B\nobserve sum = [A] + 2*[B]")


def test_declared_observables_come_before_the_species() -> None:
    assert NETWORK.observable_names == ("sum", "A", "B")


def test_an_observable_and_a_species_are_both_linear_combinations() -> None:
    assert NETWORK.observable_terms("sum") == (("A", 1.0), ("B", 2.0))
    assert NETWORK.observable_terms("B") == (("B", 1.0),)


def test_an_unknown_name_is_a_key_error() -> None:
    with pytest.raises(KeyError):
        NETWORK.observable_terms("C")
