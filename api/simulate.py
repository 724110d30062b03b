"""Curves of a mechanism for stated constants and start concentrations; nothing is kept."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from django.urls import path
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.queries import problems_in_text, referred
from api.schema import operation
from kinetics_db.engine.conditions import Conditions
from kinetics_db.engine.network import parse_mechanism
from kinetics_db.engine.simulation.equations import equations_of
from kinetics_db.engine.simulation.reference import simulate
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.exchange.tables import plain_values
from kinetics_db.mechanisms.selectors import network_of, version_by_id

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.engine.network import Network
    from kinetics_db.engine.simulation.curves import Curves

MOST_TIMES = 5_000
MOST_SPECIES = 300
MOST_VALUES = 500_000
LARGEST_SYSTEM = 20_000_000
"""Numbers in the matrices of the rate equations; somebody else's pages wait while they are made."""
SECONDS = 10.0
STEPS = 100_000
RTOL = 1e-8


class Simulation(serializers.Serializer):
    """What is to be simulated; exactly one of text and version."""

    text = serializers.CharField(required=False, help_text="in the mechanism notation")
    version = serializers.IntegerField(required=False, help_text="of a stored mechanism")
    constants = serializers.DictField(child=serializers.FloatField(), help_text="by name, for mol/L and s")
    start = serializers.DictField(
        child=serializers.FloatField(), help_text="mol/L by species; others begin at 0"
    )
    times = serializers.ListField(
        child=serializers.FloatField(), help_text="s, not decreasing, from 0; at most 5000"
    )
    temperature = serializers.FloatField(required=False, help_text="K")
    rtol = serializers.FloatField(required=False, help_text="relative tolerance, 1e-8 unless stated")


class OutcomeSchema(serializers.Serializer):
    """How the integration ended."""

    status = serializers.ChoiceField(["done", "too many steps", "out of time", "failed"])
    message = serializers.CharField(help_text="the reason, unless it is done")
    steps = serializers.IntegerField()
    rate_evaluations = serializers.IntegerField()
    reached = serializers.FloatField(help_text="s; values beyond are null")


class CurvesSchema(serializers.Serializer):
    """Concentrations in mol/L, a list for each name, in the order of the times."""

    times = serializers.ListField(child=serializers.FloatField(), help_text="s")
    species = serializers.DictField(
        child=serializers.ListField(child=serializers.FloatField(allow_null=True))
    )
    observables = serializers.DictField(
        child=serializers.ListField(child=serializers.FloatField(allow_null=True))
    )
    outcome = OutcomeSchema()


class Simulate(ApiView):
    """A simulation."""

    writes = False

    @operation(
        "simulate", tag="mechanisms", summary="Curves for stated constants and start concentrations; nothing is kept",
        takes=Simulation, answers=CurvesSchema,
        description="Takes at most ten seconds. An integration that fails, or needs longer, is an outcome with its "
        "reason, not an error; values that were not reached are null.",
    )  # fmt: skip
    def post(self, request: Request) -> Response:
        self.params(request)
        body = Body.of(request)
        text, version = body.text("text"), body.whole("version")
        constants, start = body.numbers_by_name("constants"), body.numbers_by_name("start")
        times = body.numbers("times", most=MOST_TIMES)
        temperature, rtol = body.number("temperature"), body.number("rtol", RTOL)
        body.done()
        network = _network(request.user, text, version)
        _require_small(network, len(times))
        return Response(_plain(_curves(network, constants, start, times, temperature, rtol or 0.0)))


def _network(user: User, text: str, version: int | None) -> Network:
    if bool(text) == (version is not None):
        message = "both text and version" if text else "neither text nor version"
        raise InvalidInput(message, field="text", cure="one of them")
    if not text:
        return network_of(referred("version", version, lambda pk: version_by_id(user=user, version_id=pk)))
    with problems_in_text():
        return parse_mechanism(text)


def _require_small(network: Network, times: int) -> None:
    """Refuse what would take this process more memory or time than a page may wait for."""
    problems = []
    if not times:
        problems.append(Problem("no times", field="times", cure="at least one time in s"))
    names = len(network.species) + len(network.observables)
    if times * names > MOST_VALUES:
        cure = f"at most {MOST_VALUES:,}: fewer times"
        problems.append(Problem(f"{times * names:,} values", field="times", cure=cure))
    if len(network.species) > MOST_SPECIES or _size(network) > LARGEST_SYSTEM:
        cure = f"at most {MOST_SPECIES} species and about 150 steps; a fit simulates larger ones"
        problems.append(Problem("the mechanism is too large to be simulated here", field="text", cure=cure))
    if problems:
        raise InvalidInput(problems)


def _size(network: Network) -> int:
    equations = equations_of(network)
    tape = equations.law_tape
    terms = len(equations.channel_constants) + len(equations.entry_channel) + tape.outputs
    terms += len(tape.species_entries) + len(tape.name_entries)
    return math.prod(equations.net.shape) * terms


def _curves(
    network: Network,
    constants: dict[str, float],
    start: dict[str, float],
    times: list[float],
    temperature: float | None,
    rtol: float,
) -> Curves:
    try:
        return simulate(
            network,
            constants=constants,
            start=start,
            times=times,
            conditions=Conditions(temperature=temperature),
            rtol=rtol,
            max_steps=STEPS,
            max_seconds=SECONDS,
        )
    except InvalidInput as error:
        problems = [replace(p, field="temperature") if p.field == "conditions" else p for p in error.problems]
        raise InvalidInput(problems) from error


def _plain(curves: Curves) -> dict[str, Any]:
    outcome = curves.outcome
    return {
        "times": curves.times.tolist(),
        "species": {name: plain_values(curves.of(name)) for name in curves.species},
        "observables": {name: plain_values(curves.of(name)) for name in curves.observables},
        "outcome": {
            "status": outcome.status,
            "message": outcome.message,
            "steps": outcome.steps,
            "rate_evaluations": outcome.rate_evaluations,
            "reached": outcome.reached,
        },
    }


urlpatterns = [path("simulate/", Simulate.as_view(), name="simulate")]
