"""Choosing runs by what they were: concentrations, temperature, dates, people, controls.

`RunQuery` is what a person asks for, from a line of text (`runs.query_text`), from named parameters or made
directly; `runs_found` gives the runs. For the rows of a list see `measurements.rows.run_rows`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time, timedelta
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from django.db.models import Exists, OuterRef, QuerySet, Subquery

from kinetics_db.accounts.models import User
from kinetics_db.projects.selectors import projects_visible_to
from kinetics_db.runs.models import Run, RunCondition

ROUNDING = 1e-9
"""Bounds are this much wider, relatively, so that a value lies within bounds equal to it in another unit."""

RUN_ORDERS: Mapping[str, tuple[str, ...]] = {
    "newest": ("-created", "-id"),
    "oldest": ("created", "id"),
    "code": ("code", "id"),
    "code, from the end": ("-code", "-id"),
}
"""Orders of a list of runs, for `paging.page_of`."""

ANY = "any"


@dataclass(frozen=True)
class Range:
    """From ``low`` to ``high``, both included, in the stored unit; None leaves an end open.

    ``text`` is the range as it was typed, in its own unit, to be shown again.
    """

    low: float | None = None
    high: float | None = None
    text: str = field(default="", compare=False)


@dataclass(frozen=True)
class StartRange:
    """A compound that is put in, and how much of it: mol/L, or percent where ``relative``; None for any amount."""

    compound: str
    range: Range | None = None
    relative: bool = False


@dataclass(frozen=True)
class RunQuery:
    """What runs are looked for; everything stated must hold, an empty query finds all.

    Attributes
    ----------
    starts : start concentrations
    temperature, volume : in K and in L
    after, before : logged on that day or later; logged before that day began; days in the person's time zone
    code : how the code begins, in small or capital letters alike
    author : user name of who logged it
    control : a kind of control; 'any' for any; '' for runs that are no controls; None for all
    replicate_of : code of the run that it repeats
    table : whether it has a concentration table; False finds runs that wait for their file or its reduction
    project : short name of the project
    """

    starts: tuple[StartRange, ...] = ()
    temperature: Range | None = None
    volume: Range | None = None
    after: date | None = None
    before: date | None = None
    code: str = ""
    author: str = ""
    control: str | None = None
    replicate_of: str = ""
    table: bool | None = None
    project: str = ""

    def __bool__(self) -> bool:
        return self != RunQuery()

    @classmethod
    def from_text(cls, text: str) -> RunQuery:
        """From a line such as ``[ArX]0 50..150 mM, 40 degC, after 2026-03-01, by mira``; see `runs.query_text`.

        Raises
        ------
        InvalidInput
            with a problem for each part that cannot be read, its field 'filter', and its column.
        """
        from kinetics_db.runs.query_text import query_from_text

        return query_from_text(text)

    @classmethod
    def from_params(cls, params: Mapping[str, Any], *, ignore: Iterable[str] = ()) -> RunQuery:
        """From named parameters, as an address has them: see `runs.query_params.PARAMETERS`.

        ``ignore`` names parameters that are somebody else's, such as 'cursor'.

        Raises
        ------
        InvalidInput
            with a problem for each parameter that is unknown or cannot be read; its field is the parameter.
        """
        from kinetics_db.runs.query_params import query_from_params

        return query_from_params(params, ignore=ignore)

    def to_text(self) -> str:
        """The line that `from_text` reads as this query, its parts in a fixed order."""
        from kinetics_db.runs.query_text import text_of_query

        return text_of_query(self)


def condition_key(compound: str, *, relative: bool = False) -> str:
    """Under which key a start concentration is found; percent and mol/L have keys of their own."""
    return f"percent:{compound}" if relative else f"c0:{compound}"


def runs_found(*, user: User, query: RunQuery, project_id: int | None = None) -> QuerySet[Run]:
    """Runs that match, of all projects that the person may see or of one; none of a project of others.

    One query, unordered: `paging.page_of` with one of `RUN_ORDERS` cuts it into pages.
    """
    found = Run.objects.filter(project__in=projects_visible_to(user)).order_by()
    found = found.select_related("project", "created_by", "replicate_of")
    if project_id is not None:
        found = found.filter(project_id=project_id)
    if query.project:
        found = found.filter(project__slug=query.project)
    for start in query.starts:
        found = found.filter(_has(condition_key(start.compound, relative=start.relative), start.range))
    for key, span in (("temperature", query.temperature), ("volume", query.volume)):
        if span is not None:
            found = found.filter(_has(key, span))
    return _by_record(found, query, _zone(user))


def _by_record(found: QuerySet[Run], query: RunQuery, zone: ZoneInfo) -> QuerySet[Run]:
    """Narrow by what stands in the run's own row."""
    if query.after is not None:
        found = found.filter(created__gte=_beginning(query.after, zone))
    if query.before is not None:
        found = found.filter(created__lt=_beginning(query.before, zone))
    if query.code:
        found = found.filter(code__istartswith=query.code)
    if query.author:
        # As a value that is looked up first, so that the database can tell how many runs to expect.
        author = User.objects.filter(username=query.author).values("pk")[:1]
        found = found.filter(created_by=Subquery(author))
    if query.control == ANY:
        found = found.exclude(control_kind="")
    elif query.control is not None:
        found = found.filter(control_kind=query.control)
    if query.replicate_of:
        found = found.filter(replicate_of__code=query.replicate_of)
    if query.table is not None:
        tables = Run.concentration_tables.rel.related_model.objects.filter(run=OuterRef("pk"))  # type: ignore[attr-defined]
        found = found.filter(Exists(tables) if query.table else ~Exists(tables))
    return found


def _has(key: str, span: Range | None) -> Exists:
    rows = RunCondition.objects.filter(run=OuterRef("pk"), key=key)
    if span is not None and span.low is not None:
        rows = rows.filter(value__gte=span.low - abs(span.low) * ROUNDING)
    if span is not None and span.high is not None:
        rows = rows.filter(value__lte=span.high + abs(span.high) * ROUNDING)
    return Exists(rows)


def _zone(user: User) -> ZoneInfo:
    try:
        return ZoneInfo(user.time_zone)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        return ZoneInfo("UTC")


def _beginning(day: date, zone: ZoneInfo) -> datetime:
    """When that day begins in the zone; the first and last days there are stay within what databases hold."""
    inside = min(max(day, date.min + timedelta(days=2)), date.max - timedelta(days=2))
    return datetime.combine(inside, time(), tzinfo=zone)
