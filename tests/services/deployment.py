"""Dockerfile and docker-compose.yml as the tests read and run them."""

from __future__ import annotations

import json
import re
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import yaml

from tests.services.processes import CHECKOUT

COMPOSE_FILE = CHECKOUT / "docker-compose.yml"
DOTENV = CHECKOUT / ".env.example"
FILLED_IN = {
    "RATEWRIGHT_SECRET_KEY": "0123456789abcdef" * 4,
    "RATEWRIGHT_HOSTS": "ratewright.example.org",
    "POSTGRES_PASSWORD": "ab" * 32,
    "REDIS_PASSWORD": "cd" * 32,
}
"""What a person has to fill in for `docker compose`."""

VARIABLE = re.compile(r"\$(?:(\$)|\{(\w+)(?:(:[-?])([^}]*))?\})")


class Missing(Exception):
    """A variable that docker-compose.yml insists on; the message is the file's own."""


def interpolated(text: str, variables: Mapping[str, str]) -> str:
    """``${NAME}``, ``${NAME:-otherwise}``, ``${NAME:?message}`` and ``$$`` as compose takes them."""

    def value(match: re.Match[str]) -> str:
        dollar, name, operator, rest = match.groups()
        if dollar:
            return "$"
        given = variables.get(name, "")
        if not given and operator == ":?":
            raise Missing(f"{name}: {rest}")
        return given or (rest if operator == ":-" else "")

    return VARIABLE.sub(value, text)


def compose(variables: Mapping[str, str] = FILLED_IN) -> dict[str, Any]:
    """The file's content with anchors merged and variables filled in."""

    def filled(value: Any) -> Any:
        if isinstance(value, str):
            return interpolated(value, variables)
        if isinstance(value, dict):
            return {key: filled(inner) for key, inner in value.items()}
        return [filled(inner) for inner in value] if isinstance(value, list) else value

    raw = compose_as_written()
    return {key: filled(value) for key, value in raw.items()}


def compose_as_written() -> dict[str, Any]:
    loaded = yaml.safe_load(COMPOSE_FILE.read_text(encoding="utf-8"))
    assert isinstance(loaded, dict)
    return loaded


def ours(services: Mapping[str, Any]) -> dict[str, Any]:
    """The services that run this project's image."""
    return {name: service for name, service in services.items() if "build" in service}


def command_of(service: str) -> list[str]:
    """A service's command, run with the suite's own Python instead of the image's."""
    program, *arguments = compose()["services"][service]["command"]
    if program == "python":
        return [sys.executable, *arguments]
    return [sys.executable, "-m", program, *arguments]


def health_command_of(service: str) -> list[str]:
    kind, program, *arguments = compose()["services"][service]["healthcheck"]["test"]
    assert (kind, program) == ("CMD", "python")
    return [sys.executable, *arguments]


def environment_of(service: str) -> dict[str, str]:
    """What a service gets: the image's variables and its own, without PATH and PYTHONPATH of the image."""
    own = compose()["services"][service]["environment"]
    both = {**image_environment(), **{name: str(value) for name, value in own.items()}}
    return {name: value for name, value in both.items() if not name.endswith("PATH")}


@dataclass(frozen=True)
class Instruction:
    """A line of the Dockerfile, continuations joined."""

    word: str
    rest: str

    def as_list(self) -> list[str]:
        found = json.loads(self.rest)
        assert isinstance(found, list)
        return found


def dockerfile() -> list[Instruction]:
    text = (CHECKOUT / "Dockerfile").read_text(encoding="utf-8")
    kept = "\n".join(line for line in text.splitlines() if not line.lstrip().startswith("#"))
    lines = [line.strip() for line in kept.replace("\\\n", " ").splitlines() if line.strip()]
    return [Instruction(*line.split(None, 1)) for line in lines]


def final_stage() -> list[Instruction]:
    """The instructions of the image that is kept."""
    found = dockerfile()
    begin = max(i for i, instruction in enumerate(found) if instruction.word == "FROM")
    return found[begin:]


def image_environment() -> dict[str, str]:
    return {
        name: value
        for instruction in final_stage()
        if instruction.word == "ENV"
        for name, value in (word.split("=", 1) for word in instruction.rest.split())
    }


def dotenv() -> dict[str, str]:
    """The variables of .env.example with what they are set to there."""
    lines = DOTENV.read_text(encoding="utf-8").splitlines()
    return dict(line.split("=", 1) for line in lines if line and not line.startswith("#"))
