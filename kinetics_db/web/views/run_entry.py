"""Logging a run, from a copy of another or from nothing, and revising it; amounts become concentrations meanwhile."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any
from urllib.parse import urlencode

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import path, reverse

from kinetics_db.errors import Conflict, NotFound, Problem
from kinetics_db.materials.selectors import material_names
from kinetics_db.projects.selectors import project_named, require_contributor
from kinetics_db.runs.entry import RunEntry
from kinetics_db.runs.selectors import entry_of, free_code, run_by_id, run_sheet
from kinetics_db.runs.services import log_run, preview_entry, revise_run
from kinetics_db.web.forms import form_response, problem_words, problems_shown, show_problem
from kinetics_db.web.pages import ReadersRequest, action, form_page
from kinetics_db.web.present.entries import AmountsSheet, amounts_sheet, differences
from kinetics_db.web.run_forms import (
    NAMES,
    ChargeForm,
    RunForm,
    Typed,
    charges_of,
    initial_of,
    mark_changes,
    read_entry,
)

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.projects.models import Project
    from kinetics_db.runs.models import Run, RunRevision
    from kinetics_db.web.rows import Rows

UNITS = ("mg", "g", "uL", "mL", "umol", "mmol", "mol", "mmol/L", "mol/L", "%")
FORM = "web/runs/entry_page.html"


@dataclass(frozen=True)
class Original:
    """The revision that an entry begins with."""

    run: Run
    revision: RunRevision
    entry: RunEntry

    @property
    def name(self) -> str:
        """As in 'K12 (r3)'."""
        return f"{self.run.code} (r{self.revision.number})"

    @property
    def key(self) -> str:
        """By which the form names it: '17.3'."""
        return f"{self.run.pk}.{self.revision.number}"


OWN = ("code", "started")
"""What a copy does not take over: it has a code and a time of its own."""


class OpenForm:
    """A form of a run with its charges as they stand now: begun from an original, or as sent."""

    def __init__(self, request: ReadersRequest, project: Project, original: Original | None, **begun: str):
        values: dict[str, str] = {}
        rows: list[dict[str, str]] = []
        if original is not None:
            values, rows = initial_of(original.entry)
            values["against"] = original.key
        self.user, self.project, self.original = request.user, project, original
        self.data = request.POST.copy() if request.method == "POST" else None
        self.form = RunForm(self.data, initial={**values, **begun})
        self.charges: Rows[ChargeForm] = charges_of(self.data, initial=rows)
        self.left_out: list[str] = []
        self.not_compared = OWN if not self.form.typed("based_on") else ("code",)
        self.overtaken = False

    def stays(self) -> bool:
        """Whether what was sent only asks to see the form again: with other rows, or with concentrations."""
        return self.data is None or self.charges.change_asked(self.data) or "look" in self.data

    def accepted(
        self, write: Callable[[RunEntry], RunRevision], *, code: str | None = None
    ) -> RunRevision | None:
        """What ``write`` makes of the entry; None when something is wrong, which the form then shows.

        ``overtaken`` is true from then on where somebody else was first.
        """
        readable = [self.form.is_valid(), self.charges.is_valid()]
        typed = read_entry(self.form, self.charges, code=code)
        for form, problem in typed.problems:
            show_problem(form, problem, rows={}, names={})
        if not all(readable):
            return None
        if typed.problems:
            found = preview_entry(user=self.user, project_id=self.project.pk, entry=typed.entry)
            for problem in found.problems:
                if typed.entry.charges or problem.field != "charges":
                    show_problem(self.form, problem, rows={"charges": typed}, names=NAMES)
            return None
        with problems_shown(self.form, rows={"charges": typed}, names=NAMES):
            try:
                return write(typed.entry)
            except Conflict:
                self.overtaken = True
        return None

    def begin_again_from(self, newest: Original) -> None:
        """Whoever sends the form once more has seen the newest revision."""
        assert self.data is not None
        self.original = newest
        self.data["based_on"], self.data["against"] = str(newest.revision.number), newest.key

    def context(self, *, code: str | None = None) -> dict[str, Any]:
        """What the template needs."""
        names = material_names(user=self.user, project_id=self.project.pk)
        known = {"compound": names.compounds, "lot": [code for code, _ in names.lots], "stock": names.stocks}
        self._say_what_is_missing(known)
        if self.original is not None:
            initial = initial_of(self.original.entry)
            self.left_out = mark_changes(self.form, self.charges, *initial, but=self.not_compared)
        return {
            "project": self.project,
            "form": self.form,
            "charges": self.charges,
            "left_out": self.left_out,
            "names": known,
            "units": UNITS,
            "original": self.original,
            "amounts": self.amounts(code=code, live=False),
        }

    def amounts(self, *, code: str | None, live: bool) -> AmountsSheet:
        """The start concentrations of what stands in the form; ``live`` says in words what is still wrong."""
        typed = read_entry(self.form, self.charges, code=code or self.form.typed("code") or "?")
        found = preview_entry(user=self.user, project_id=self.project.pk, entry=typed.entry)
        words = _words(typed, found.problems) if live else []
        differ = []
        if live and self.original is not None:
            entry, was = typed.entry, self.original.entry
            if any(isinstance(form, ChargeForm) for form, _ in typed.problems):
                entry = replace(entry, charges=was.charges)  # one that cannot be read is not one taken out
            differ = differences(was, entry, but=self.not_compared)
        against = self.original.name if self.original is not None else ""
        return amounts_sheet(found, problems=words, differences=differ, against=against)

    def _say_what_is_missing(self, known: dict[str, Any]) -> None:
        """A material that does not exist gets a link to enter it, or a word where another kind has that name."""
        for row in self.charges.forms:
            if not row.is_bound or not row.errors:
                continue
            kind, source = row.typed["kind"], row.typed["source"].strip()
            if not source or kind not in known or source in known[kind]:
                continue
            others = [other for other in known if source in known[other]]
            if others:
                row.add_error("kind", f"There is a {others[0]} '{source}'; choose {others[0]} for it.")
            elif len(source) <= 80:
                field = "name" if kind == "compound" else "code"
                address = reverse(f"web:new-{kind}", args=[self.project.slug])
                row.missing = f"{address}?{urlencode({field: source})}"


@form_page
def new_run(request: ReadersRequest, slug: str) -> HttpResponse:
    """Log a run; ``?copy=`` takes all but code and start from another run of the project."""
    project = project_named(user=request.user, slug=slug)
    require_contributor(user=request.user, project_id=project.pk)
    original = _original(request.user, project, request.GET.get("copy", ""))
    opened = OpenForm(request, project, original, **dict.fromkeys(OWN, ""))
    stays = opened.stays()
    if not stays:

        def write(entry: RunEntry) -> RunRevision:
            return log_run(user=request.user, project_id=project.pk, entry=entry)

        revision = opened.accepted(write)
        if revision is not None:
            messages.success(request, f"Run {revision.run.code} is logged.")
            return redirect("web:run", revision.run_id)
    if original is not None:
        free = free_code(user=request.user, project_id=project.pk, like=original.run.code)
        opened.form.fields["code"].help_text = f"The copy needs its own code; {free} is free."
    context = {
        **opened.context(),
        "send": "Log the run",
        "leave": reverse("web:runs", args=[project.slug]),
    }
    return _shown(request, context, stays=stays)


@form_page
def revise(request: ReadersRequest, run_id: int) -> HttpResponse:
    """Write a run's next revision. Where somebody else was first, both versions are shown and nothing is lost."""
    run = run_by_id(user=request.user, run_id=run_id)
    require_contributor(user=request.user, project_id=run.project_id)
    newest = _revision(request.user, run.pk)
    based_on = _whole(request.POST.get("based_on", ""))
    original = newest
    if based_on is not None and 1 <= based_on < newest.revision.number:
        original = _revision(request.user, run.pk, based_on)
    opened = OpenForm(request, run.project, original, based_on=str(newest.revision.number))
    stays = opened.stays()
    if not stays:
        reason = opened.form.typed("reason")

        def write(entry: RunEntry) -> RunRevision:
            return revise_run(user=request.user, run=run, entry=entry, based_on=based_on or 0, reason=reason)

        revision = opened.accepted(write, code=run.code)
        if revision is not None:
            changed = revision.number > newest.revision.number
            words = f"revision {revision.number} is stored" if changed else "nothing was changed"
            messages.success(request, f"Run {run.code}: {words}.")
            return redirect("web:run", run.pk)
    context: dict[str, Any] = {"run": run, "newest": newest.revision, "conflict": None}
    if opened.overtaken:
        newest = _revision(request.user, run.pk)
        typed = read_entry(opened.form, opened.charges, code=run.code)
        context |= {"newest": newest.revision, "conflict": differences(typed.entry, newest.entry)}
        opened.begin_again_from(newest)
    context |= opened.context(code=run.code)
    context |= {"send": "Store the revision", "leave": reverse("web:run", args=[run.pk])}
    return _shown(request, context, stays=stays)


@action
def run_amounts(request: ReadersRequest, slug: str) -> HttpResponse:
    """A part of the form: the start concentrations of what was typed so far; nothing is stored."""
    project = project_named(user=request.user, slug=slug)
    run_id, _, number = request.POST.get("against", "").partition(".")
    original = _original(request.user, project, run_id, number)
    opened = OpenForm(request, project, original)
    code = original.run.code if original is not None else None
    return render(request, "web/runs/amounts.html", {"amounts": opened.amounts(code=code, live=True)})


def _shown(request: HttpRequest, context: dict[str, Any], *, stays: bool) -> HttpResponse:
    if stays:
        return render(request, FORM, context)
    return form_response(request, FORM, context)


def _original(user: User, project: Project, run_id: str, number: str = "") -> Original | None:
    """The run of that id in the project; None where there is none such."""
    key, revision = _whole(run_id), _whole(number)
    if key is None or (number and revision is None):
        return None
    try:
        found = _revision(user, key, revision)
    except NotFound:
        return None
    return found if found.run.project_id == project.pk else None


def _revision(user: User, run_id: int, number: int | None = None) -> Original:
    sheet = run_sheet(user=user, run_id=run_id, number=number)
    return Original(sheet.run, sheet.revision, entry_of(sheet.revision))


def _whole(text: str) -> int | None:
    """A number of a record, as an address or a hidden field has it."""
    return int(text) if text.isdecimal() and text.isascii() and len(text) <= 9 else None


def _words(typed: Typed, problems: Sequence[Problem]) -> list[str]:
    """What is wrong so far, each with its place as the page names it."""
    words = []
    for form, problem in typed.problems:
        place = f"charge {form.place}" if isinstance(form, ChargeForm) else _place(problem.field or "")
        words.append(f"{place}: {problem_words(problem)}")
    for problem in problems:
        first, _, rest = (problem.field or "").partition(".")
        number = rest.partition(".")[0]
        if first == "charges" and number.isdecimal():
            words.append(f"charge {typed.forms[int(number) - 1].place}: {problem_words(problem)}")
        elif first == "charges" and typed.problems:
            continue  # nothing was put in that can be read: the charge says why itself
        else:
            words.append(f"{_place(problem.field or '')}: {problem_words(problem)}")
    return words


def _place(field: str) -> str:
    """'total_volume.unit' and 'volume_value' as 'total volume'."""
    first = field.partition(".")[0].rpartition("_")[0] if "_value" in field or "_unit" in field else field
    found = {"volume": "total volume", "total_volume": "total volume", "": "run"}
    return found.get(first, first.replace(".", ", ").replace("_", " "))


urlpatterns = [
    path("projects/<slug:slug>/runs/new/", new_run, name="new-run"),
    path("projects/<slug:slug>/runs/amounts/", run_amounts, name="run-amounts"),
    path("runs/<int:run_id>/revise/", revise, name="revise-run"),
]
