"""Mechanisms and their versions as plain values, and what the description says of them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from rest_framework import serializers

from api.errors import MOST_PROBLEMS, plain_problem
from api.schema import ProblemPlace
from kinetics_db.engine.network import Network, canonical_form, constant_units, must_be_charged, write
from kinetics_db.mechanisms.selectors import network_of

if TYPE_CHECKING:
    from kinetics_db.errors import Problem
    from kinetics_db.mechanisms.models import Mechanism, MechanismVersion


class ConstantSchema(serializers.Serializer):
    """A constant of a mechanism."""

    name = serializers.CharField()
    unit = serializers.CharField(help_text="for mol/L and s; '' where none follows from a step")
    computed = serializers.BooleanField(help_text="by a 'where' line, so that it is not fitted")


class ObservableSchema(serializers.Serializer):
    """What an instrument sees: a sum of weight times concentration."""

    name = serializers.CharField()
    terms = serializers.DictField(child=serializers.FloatField(), help_text="weights by species")


class NetworkSchema(serializers.Serializer):
    """What a text says."""

    written = serializers.CharField(help_text="the same in the notation, one statement a line")
    canonical = serializers.DictField(help_text="equal for texts that say the same; the digest is over it")
    species = serializers.ListField(child=serializers.CharField())
    held = serializers.ListField(child=serializers.CharField(), help_text="at a constant concentration")
    must_be_charged = serializers.ListField(
        child=serializers.CharField(), help_text="species that nothing forms"
    )
    constants = ConstantSchema(many=True)
    observables = ObservableSchema(many=True)


class VersionInList(serializers.Serializer):
    """A version without its text."""

    id = serializers.IntegerField()
    mechanism = serializers.CharField()
    number = serializers.IntegerField()
    digest = serializers.CharField()
    note = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()


class VersionDetail(VersionInList):
    """A version with its text and what that says."""

    mechanism_id = serializers.IntegerField()
    project = serializers.CharField()
    text = serializers.CharField()
    network = NetworkSchema()


class NewestVersion(serializers.Serializer):
    """The newest version of a mechanism."""

    id = serializers.IntegerField()
    number = serializers.IntegerField()
    note = serializers.CharField()
    created = serializers.DateTimeField()
    created_by = serializers.CharField()


class ShownMechanism(serializers.Serializer):
    """A mechanism: a name that its versions share."""

    id = serializers.IntegerField()
    name = serializers.CharField()
    versions = serializers.IntegerField(help_text="how many")
    newest = NewestVersion(allow_null=True)


class NewVersion(serializers.Serializer):
    """A text to be stored."""

    text = serializers.CharField(help_text="in the mechanism notation, one statement a line")
    note = serializers.CharField(required=False)


class NewMechanism(NewVersion):
    """A text to be stored as a version of the named mechanism."""

    project = serializers.CharField(help_text="short name")
    name = serializers.CharField(max_length=120)


class TextToCheck(serializers.Serializer):
    """A text that is not stored."""

    text = serializers.CharField()


class CheckedText(serializers.Serializer):
    """A text as it is understood."""

    valid = serializers.BooleanField(help_text="whether it can be used; warnings do not count")
    problems = ProblemPlace(many=True, help_text="the first hundred, errors first")
    further_problems = serializers.IntegerField()
    network = NetworkSchema(allow_null=True)


def plain_network(network: Network) -> dict[str, Any]:
    """A network in plain values; units are for mol/L and s."""
    computed = {one.name for one in network.computed}
    return {
        "written": write(network),
        "canonical": canonical_form(network),
        "species": list(network.species),
        "held": list(network.held),
        "must_be_charged": list(must_be_charged(network)),
        "constants": [
            {"name": name, "unit": unit, "computed": name in computed}
            for name, unit in constant_units(network).items()
        ],
        "observables": [{"name": one.name, "terms": _terms(one.terms)} for one in network.observables],
    }


def _terms(terms: Sequence[tuple[str, float]]) -> dict[str, float]:
    found: dict[str, float] = {}
    for species, weight in terms:
        found[species] = found.get(species, 0.0) + weight
    return found


def plain_checked(problems: Sequence[Problem], network: Network | None) -> dict[str, Any]:
    """What the checks found in a text."""
    ordered = sorted(problems, key=lambda problem: problem.severity == "warning")
    return {
        "valid": network is not None,
        "problems": [plain_problem(problem) for problem in ordered[:MOST_PROBLEMS]],
        "further_problems": max(0, len(ordered) - MOST_PROBLEMS),
        "network": plain_network(network) if network is not None else None,
    }


def plain_mechanism(mechanism: Mechanism) -> dict[str, Any]:
    """A mechanism of a list (`mechanisms.selectors.mechanisms_in`)."""
    found: Any = mechanism
    newest = None
    if found.newest_id is not None:
        newest = {
            "id": found.newest_id,
            "number": found.newest_number,
            "note": found.newest_note,
            "created": found.newest_created,
            "created_by": found.newest_author,
        }
    return {"id": found.pk, "name": found.name, "versions": found.number_of_versions, "newest": newest}


def plain_version(version: MechanismVersion) -> dict[str, Any]:
    """A version without its text."""
    return {
        "id": version.pk,
        "mechanism": version.mechanism.name,
        "number": version.number,
        "digest": version.digest,
        "note": version.note,
        "created": version.created,
        "created_by": version.created_by.get_username(),
    }


def plain_version_detail(version: MechanismVersion) -> dict[str, Any]:
    """A version with its text and its network."""
    return {
        **plain_version(version),
        "mechanism_id": version.mechanism_id,
        "project": version.mechanism.project.slug,
        "text": version.text,
        "network": plain_network(network_of(version)),
    }
