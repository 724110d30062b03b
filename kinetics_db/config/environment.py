"""Reading environment variables, so that a wrong one is named in a sentence instead of a traceback's last line."""

from __future__ import annotations

import math
import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from urllib.parse import parse_qsl, urlencode, urlsplit, urlunsplit


class WrongEnvironment(RuntimeError):
    """A variable is missing or cannot be used; the message says which and what would do."""


def required(name: str) -> str:
    """The variable's value; WrongEnvironment when it is missing or blank."""
    value = os.environ.get(name, "").strip()
    if not value:
        raise WrongEnvironment(f"set {name}: a lab installation takes it from the environment")
    return value


def number(name: str, default: float, *, least: float = 0.0) -> float:
    """A finite number of at least ``least``, or the default where the variable is missing or blank."""
    given = os.environ.get(name, "").strip()
    if not given:
        return default
    try:
        value = float(given)
    except ValueError:
        value = math.nan
    if not (math.isfinite(value) and value >= least):
        raise WrongEnvironment(f"{name} is {given!r}, not a number of at least {least:g}")
    return value


def count(name: str, default: int, *, least: int = 1) -> int:
    """A whole number of at least ``least``, or the default where the variable is missing or blank."""
    value = number(name, default, least=least)
    if value != int(value):
        raise WrongEnvironment(f"{name} is {value:g}, not a whole number of at least {least}")
    return int(value)


def choice(name: str, default: str, among: Sequence[str]) -> str:
    """One of the words ``among``."""
    value = os.environ.get(name, "").strip() or default
    if value not in among:
        raise WrongEnvironment(f"{name} is {value!r}; it takes {' or '.join(among)}")
    return value


@dataclass(frozen=True)
class Host:
    """A name under which the web server is reached; ``port`` is '' for the usual one."""

    name: str
    port: str

    def origin(self, scheme: str) -> str:
        """As a browser names the page that sends a form; a leading dot stands for any name below it."""
        name = f"*{self.name}" if self.name.startswith(".") else self.name
        return f"{scheme}://{name}{self.port and ':' + self.port}"


HOST = re.compile(r"(\.?[a-zA-Z0-9_-]+(?:\.[a-zA-Z0-9_-]+)*|\[[0-9a-fA-F:.]+\])(?::(\d{1,5}))?")


def hosts(text: str) -> list[Host]:
    """From ``ratewright.example.org, lab.example.org:8443``; WrongEnvironment names what is no host."""
    found = []
    for word in filter(None, (word.strip() for word in text.split(","))):
        match = HOST.fullmatch(word)
        if match is None:
            raise WrongEnvironment(
                f"RATEWRIGHT_HOSTS holds {word!r}; it takes names with or without a port, separated by commas, "
                "for instance ratewright.example.org,lab.example.org:8443"
            )
        found.append(Host(match[1], match[2] or ""))
    if not found:
        raise WrongEnvironment("RATEWRIGHT_HOSTS names no host")
    return found


def cache_url_beside(broker: str) -> str:
    """The address of the next database on the queue's server, as a Redis client takes it.

    ``redis://:secret@queue:6379/0`` gives ``redis://:secret@queue:6379/1``; a socket's
    ``redis+socket:///run/queue.sock?virtual_host=0`` gives ``unix:///run/queue.sock?db=1``.
    """
    parts = urlsplit(broker)
    query = dict(parse_qsl(parts.query))
    if parts.scheme == "redis+socket":
        query["db"] = _next(query.pop("virtual_host", ""))
        # By hand: urlunsplit drops the empty host of a scheme that it does not know.
        return f"unix://{parts.netloc}{parts.path}?{urlencode(query)}"
    if parts.scheme in ("redis", "rediss"):
        return urlunsplit(parts._replace(path=f"/{_next(parts.path.strip('/'))}"))
    raise WrongEnvironment(
        f"set RATEWRIGHT_CACHE_URL (redis://, rediss:// or unix://): none follows from a queue at {parts.scheme}://"
    )


def _next(database: str) -> str:
    return str(int(database or 0) + 1) if not database or database.isdecimal() else "1"


def cache_url(given: str) -> str:
    """An address of a Redis database, as it was given."""
    if urlsplit(given).scheme not in ("redis", "rediss", "unix"):
        raise WrongEnvironment(
            "RATEWRIGHT_CACHE_URL must begin with redis://, rediss:// or unix://, "
            f"not {urlsplit(given).scheme}://"
        )
    return given
