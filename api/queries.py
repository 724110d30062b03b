"""What lists and references have in common: required parameters, numbers of records, what was there before."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeVar

from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiParameter

from kinetics_db.errors import InvalidInput, NotFound

if TYPE_CHECKING:
    from django.db.models import QuerySet

Record = TypeVar("Record")
LONGEST_ID = 18

PROJECT = OpenApiParameter("project", OpenApiTypes.STR, required=True, description="short name of a project")


def required(params: Mapping[str, str], name: str, *, cure: str = "") -> str:
    """A parameter that must stand in the query."""
    if not params.get(name):
        raise InvalidInput("is missing", field=name, cure=cure)
    return params[name]


def project_in(params: Mapping[str, str]) -> str:
    """The short name of the project that a list is of."""
    return required(params, "project", cure="?project= and the short name of a project")


def number_in(params: Mapping[str, str], name: str) -> int | None:
    """The number of a record; None where it is not stated."""
    text = params.get(name)
    if text is None:
        return None
    if not (text.isascii() and text.isdecimal() and len(text) <= LONGEST_ID):
        raise InvalidInput(f"{text!r:.40} is no number of a record", field=name, cure="a whole number")
    return int(text)


def truth_in(params: Mapping[str, str], name: str) -> bool:
    """True or false; false where it is not stated."""
    text = params.get(name, "false")
    if text not in ("true", "false"):
        raise InvalidInput(f"{text!r:.40} is neither true nor false", field=name, cure="true or false")
    return text == "true"


def choice_in(params: Mapping[str, str], name: str, choices: tuple[str, ...]) -> str:
    """One of the choices; '' where it is not stated."""
    text = params.get(name, "")
    if name in params and text not in choices:
        raise InvalidInput(f"{text!r:.40} is none of them", field=name, cure=", ".join(choices))
    return text


def referred(field: str, number: int | None, find: Callable[[int], Record]) -> Record:
    """The record that a body names; InvalidInput with the field where there is none that one may see."""
    assert number is not None  # Body.done has seen to it
    try:
        return find(number)
    except NotFound as error:
        raise InvalidInput(f"there is none with the number {number} that you may see", field=field) from error


@contextmanager
def problems_under(name: str, *, but: tuple[str, ...] = ()) -> Iterator[None]:
    """Problems of a part of the body, which a service knows by its own names only, get the part's name."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput(
            [
                p if p.field in but else replace(p, field=f"{name}.{p.field}" if p.field else name)
                for p in error.problems
            ]
        ) from error


@contextmanager
def problems_in_text() -> Iterator[None]:
    """Problems of a mechanism's text, which know their lines only, get the field that the text stood in."""
    try:
        yield
    except InvalidInput as error:
        raise InvalidInput([p if p.field else replace(p, field="text") for p in error.problems]) from error


def newest(records: QuerySet[Any]) -> int:
    """The highest number among records: what comes beyond it was made afterwards."""
    return records.order_by("-pk").values_list("pk", flat=True).first() or 0
