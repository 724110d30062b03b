"""Writing a network in the notation."""

from __future__ import annotations

from kinetics_db.engine.network.expressions import number_text, write_expression
from kinetics_db.engine.network.model import Network, Side, Step
from kinetics_db.engine.network.tokens import quoted


def write(network: Network) -> str:
    """Text of a network: its steps, then hold, observe and where, one statement a line.

    ``parse_mechanism(write(network))`` is the same network but for text and line numbers.
    """
    lines = [_step(step) for step in network.steps]
    if network.held:
        lines.append("hold " + ", ".join(quoted(name) for name in network.held))
    lines += [f"observe {quoted(one.name)} = {_combination(one.terms)}" for one in network.observables]
    lines += [f"where {one.name} = {write_expression(one.expression)}" for one in network.computed]
    return "".join(line + "\n" for line in lines)


def _step(step: Step) -> str:
    if step.law is not None:
        arrow = f"--{{ {write_expression(step.law)} }}-->"
    elif step.reverse_constant is not None:
        arrow = f"<--{step.constant} / {step.reverse_constant}-->"
    else:
        arrow = f"--{step.constant}-->"
    return f"{_side(step.reactants)} {arrow} {_side(step.products)}"


def _side(side: Side) -> str:
    if not side:
        return "nothing"
    return " + ".join(
        quoted(name) if number == 1 else f"{_plain(number)} {quoted(name)}" for name, number in side
    )


def _plain(number: float) -> str:
    """Decimal text without an exponent, as stoichiometric numbers are written."""
    text = number_text(number)
    return f"{number:.340f}".rstrip("0").rstrip(".") if "e" in text else text


def _combination(terms: Side) -> str:
    text = ""
    for name, weight in terms:
        size = abs(weight)
        term = f"[{quoted(name)}]" if size == 1 else f"{number_text(size)}*[{quoted(name)}]"
        if not text:
            text = f"-{term}" if weight < 0 else term
        else:
            text += f" - {term}" if weight < 0 else f" + {term}"
    return text
