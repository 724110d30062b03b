"""The form of a network that does not depend on how it was typed, and its hash."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from kinetics_db.engine.canonical import canonical_json, digest
from kinetics_db.engine.network.expressions import to_plain
from kinetics_db.engine.network.model import Network, Side, Step

FORM = "mechanism 1"  # names the rules below; a change of them is a new name


def canonical_form(network: Network) -> dict[str, Any]:
    """Plain values that are equal for networks that say the same.

    Comments, white space, the order of statements, of the species of a side and of the terms of an
    observable do not matter, nor which way round a reversible step is written; ``A + A`` is ``2 A``.
    Operands of an expression keep their order, since rounding depends on it.
    """
    steps = [_step(step) for step in network.steps]
    return {
        "form": FORM,
        "steps": sorted(steps, key=canonical_json),
        "held": sorted(set(network.held)),
        "observables": {one.name: _side(one.terms) for one in network.observables},
        "computed": {one.name: to_plain(one.expression) for one in network.computed},
    }


def mechanism_digest(network: Network) -> str:
    """SHA-256 of the canonical JSON of the canonical form, 64 lower-case hexadecimal digits."""
    return digest(canonical_form(network))


def same_network(one: Network, other: Network) -> bool:
    """Whether two networks are equal but for their texts and line numbers; order counts."""
    return _placeless(one) == _placeless(other)


def _placeless(network: Network) -> Network:
    return replace(
        network,
        steps=tuple(replace(step, line=0) for step in network.steps),
        observables=tuple(replace(one, line=0) for one in network.observables),
        computed=tuple(replace(one, line=0) for one in network.computed),
        text="",
    )


def _step(step: Step) -> dict[str, Any]:
    plain = _one_way_round(step.reactants, step.products, step.constant, step.reverse_constant)
    if step.law is not None:
        plain["law"] = to_plain(step.law)
    if step.reverse_constant is None:
        return plain
    other = _one_way_round(step.products, step.reactants, step.reverse_constant, step.constant)
    return min(plain, other, key=canonical_json)


def _one_way_round(left: Side, right: Side, forward: str | None, backward: str | None) -> dict[str, Any]:
    plain: dict[str, Any] = {"from": _side(left), "to": _side(right)}
    if forward is not None:
        plain["constant"] = forward
    if backward is not None:
        plain["reverse_constant"] = backward
    return plain


def _side(side: Side) -> dict[str, float]:
    numbers: dict[str, float] = {}
    for name, number in side:
        numbers[name] = numbers.get(name, 0.0) + number
    return numbers
