"""Reads about runs."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from django.db.models import Case, F, QuerySet, When

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader
from kinetics_db.runs.entry import LONGEST, Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import Run, RunCharge, RunCondition, RunRevision


def runs_in(*, user: User, project_id: int) -> QuerySet[Run]:
    """Runs of a project by code."""
    require_reader(user=user, project_id=project_id)
    return Run.objects.filter(project_id=project_id).select_related("project", "created_by").order_by("code")


def run_by_id(*, user: User, run_id: int) -> Run:
    """One run that the person may see."""
    run = Run.objects.select_related("project").filter(pk=run_id).first()
    if run is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=run.project_id)
    return run


def run_named(*, user: User, project_id: int, code: str) -> Run:
    """The run of that code in a project."""
    run = runs_in(user=user, project_id=project_id).filter(code=code).first()
    if run is None:
        raise NotFound(f"there is no run '{code}' in this project")
    return run


def latest_revision(run: Run) -> RunRevision:
    """The newest revision of a run."""
    return latest_revisions([run.pk])[run.pk]


def latest_revisions(run_ids: Sequence[int]) -> dict[int, RunRevision]:
    """The newest revision of each run, by run id, in one query."""
    return {revision.run_id: revision for revision in newest_revisions(run_ids).select_related("run")}


def newest_revisions(run_ids: Sequence[int]) -> QuerySet[RunRevision]:
    """The newest revision of each run, without the run itself."""
    return RunRevision.objects.filter(run_id__in=run_ids, number=F("run__latest_number"))


def conditions_of(run_ids: Sequence[int]) -> dict[int, dict[str, float]]:
    """Searchable conditions of runs, by run id and key, in one query."""
    found: dict[int, dict[str, float]] = {run_id: {} for run_id in run_ids}
    for run_id, key, value in RunCondition.objects.filter(run_id__in=run_ids).values_list(
        "run_id", "key", "value"
    ):
        found[run_id][key] = value
    return found


def free_code(*, user: User, project_id: int, like: str) -> str:
    """A code that no run of the project has, counted on from another: after 'K12' comes 'K13' where it is free."""
    require_reader(user=user, project_id=project_id)
    found = re.fullmatch(r"(.*?)(\d{1,9})", like, re.DOTALL | re.ASCII)
    stem, digits = (found[1], found[2]) if found else (like[: LONGEST["code"] - 4].rstrip() + "-", "1")
    alike = Run.objects.filter(project_id=project_id, code__startswith=stem)
    taken = set(alike.values_list("code", flat=True))
    number = int(digits) + (1 if found else 0)
    while (code := f"{stem}{number:0{len(digits)}d}") in taken:
        number += 1
    return code[: LONGEST["code"]]


@dataclass(frozen=True)
class RunSheet:
    """Everything that a run's own page says of the run itself.

    ``revision`` is the one shown, with its content; ``revisions`` are all of them, newest first, without theirs;
    ``charges`` are those of the shown one in order of addition, with their materials.
    """

    run: Run
    revision: RunRevision
    revisions: Sequence[RunRevision]
    charges: Sequence[RunCharge]

    @property
    def is_newest(self) -> bool:
        """Whether the revision shown is the newest one."""
        return self.revision.number == self.run.latest_number


def run_sheet(*, user: User, run_id: int, number: int | None = None) -> RunSheet:
    """A run with its revisions, showing one of them (the newest unless a number is given); five queries."""
    found = Run.objects.select_related("project", "created_by", "replicate_of").filter(pk=run_id).first()
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.project_id)
    number = found.latest_number if number is None else number
    shown = RunRevision.objects.select_related("created_by").filter(run=found, number=number).first()
    if shown is None:
        raise NotFound(f"run {found.code} has no revision {number}")
    shown.run = found
    charges = RunCharge.objects.filter(revision=shown).select_related(*MATERIALS).defer(*HEAVY_OF_MATERIALS)
    return RunSheet(found, shown, list(revisions_of(found)), list(charges.order_by("order")))


MATERIALS = ("compound_revision__compound", "lot_revision__lot", "stock_revision__stock")
HEAVY_OF_MATERIALS = tuple(f"{name}_revision__canonical" for name in ("compound", "lot", "stock"))


def revisions_of(run: Run) -> QuerySet[RunRevision]:
    """Revisions of a run, newest first, with their authors and without their content."""
    return (
        RunRevision.objects.filter(run=run)
        .select_related("created_by")
        .defer("canonical")
        .order_by("-number")
    )


def replicates_of(*, user: User, run: Run) -> QuerySet[Run]:
    """Runs that repeat a run, by code."""
    require_reader(user=user, project_id=run.project_id)
    return Run.objects.filter(replicate_of=run).order_by("code")


@dataclass(frozen=True)
class StartConcentration:
    """What was there of a compound at first contact: mol/L, or percent for a run in percent."""

    compound: str
    value: float
    standard_uncertainty: float


def start_concentrations(revision: RunRevision | Mapping[str, Any]) -> tuple[StartConcentration, ...]:
    """Start concentrations of a revision (or its content) in order of addition, each compound once.

    Contributions that share a cause of error (a flask, the vessel's volume) go wrong together and add up;
    different causes are independent (JCGM 100:2008, 5.2.2).
    """
    totals: dict[str, float] = {}
    by_cause: dict[str, dict[str, float]] = {}
    content = revision.content if isinstance(revision, RunRevision) else revision
    for position, part in enumerate(content["start"]):
        name, value = part["compound"], part["concentration"]
        totals[name] = totals.get(name, 0.0) + value
        causes = by_cause.setdefault(name, {})
        causes[f"charge {position}"] = value * part["own_relative_u"]
        for shared in (*part["shared"], *part["run_shared"]):
            causes[shared["owner"]] = causes.get(shared["owner"], 0.0) + value * shared["relative_u"]
    return tuple(
        StartConcentration(name, value, math.hypot(*by_cause[name].values()))
        for name, value in totals.items()
    )


def entry_of(revision: RunRevision) -> RunEntry:
    """The entry as it was typed, so that revising with it unchanged gives the same revision."""
    content = revision.content
    entered = content["entered"]
    return RunEntry(
        code=content["code"],
        charges=tuple(_charge(charge) for charge in entered["charges"]),
        total_volume=_amount(entered["total_volume"]),
        temperature=_amount(entered["temperature"]),
        sections={
            section: {
                key: value if isinstance(value, str) else _amount(value["entered"])
                for key, value in values.items()
            }
            for section, values in content["sections"].items()
        },
        **{
            name: content[name] for name in ("atmosphere", "started", "replicate_of", "control_kind", "notes")
        },
    )


def _charge(entered: Mapping[str, Any]) -> ChargeEntry:
    source = "stock" if entered["stock"] else "lot" if entered["lot"] else "compound"
    amount = _amount(entered["amount"])
    assert amount is not None
    return ChargeEntry(amount, note=entered["note"], **{source: entered["name"]})


def _amount(entered: Mapping[str, Any] | None) -> Amount | None:
    return None if entered is None else Amount(entered["value"], entered["unit"], entered["u"])


def runs_called(*, user: User, text: str, project_id: int | None = None) -> QuerySet[Run]:
    """Runs whose code holds the text, of all projects that the person may see or of one; whole codes first."""
    found = Run.objects.filter(project__in=projects_visible_to(user), code__icontains=text)
    found = found if project_id is None else found.filter(project_id=project_id)
    whole = Case(When(code=text, then=0), When(code__iexact=text, then=1), default=2)
    return found.select_related("project").annotate(nearness=whole).order_by("nearness", "code", "id")
