"""The search of the top line: a run's code leads to the run, conditions to the list of runs, a name to what has it."""

from __future__ import annotations

import re
from collections.abc import Iterable
from typing import Any
from urllib.parse import urlencode

from django.http import HttpResponse
from django.shortcuts import redirect, render
from django.urls import path, reverse

from kinetics_db.datasets.selectors import datasets_called
from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput
from kinetics_db.materials.selectors import compounds_called
from kinetics_db.mechanisms.selectors import mechanisms_called
from kinetics_db.projects.selectors import project_with_role
from kinetics_db.runs.query import RunQuery, StartRange, runs_found
from kinetics_db.runs.selectors import runs_called
from kinetics_db.web.forms import filter_words, problem_words
from kinetics_db.web.pages import ReadersRequest, page

MOST = 20
"""Of each kind; who wants more writes more of the name."""
LONGEST = 300
_OF_A_FILTER = re.compile(r"[\[\]<>≤≥,]|\.\.|\A\d+\s*\S*\Z")


@page
def search(request: ReadersRequest) -> HttpResponse:
    """Where ``?q=`` leads, within ``?project=`` or everywhere that the person may look."""
    slug = request.GET.get("project", "")
    project = project_with_role(user=request.user, slug=slug)[0] if slug else None
    typed = request.GET.get("q", "")
    context: dict[str, Any] = {"project": project, "searched": typed[:LONGEST], "most": MOST}
    try:
        text = plain_text(typed, field="search", longest=LONGEST)
    except InvalidInput as error:
        context["problems"] = [problem_words(problem) for problem in error.problems]
        return render(request, "web/home/search.html", context, status=400)
    if not text:
        return render(request, "web/home/search.html", context)
    query, problems = _conditions(text)
    if query is not None and project is not None:
        return redirect(f"{reverse('web:runs', args=[project.slug])}?{urlencode({'q': text})}")
    project_id = project.pk if project is not None else None
    if query is not None:
        fitting = runs_found(user=request.user, query=query).order_by("-created", "-id")[: MOST + 1]
        return render(
            request, "web/home/search.html", context | {"query": query.to_text(), "runs": _cut(fitting)}
        )
    called: dict[str, Any] = {"user": request.user, "text": text, "project_id": project_id}
    runs: list[Any] = list(runs_called(**called)[: MOST + 1])
    whole = [run for run in runs if run.code == text] or [run for run in runs if run.nearness < 2]
    if len(whole) == 1:
        return redirect("web:run", whole[0].pk)
    found = {
        "runs": _cut(runs),
        "compounds": _cut(compounds_called(**called)[: MOST + 1]),
        "mechanisms": _cut(mechanisms_called(**called)[: MOST + 1]),
        "datasets": _cut(datasets_called(**called)[: MOST + 1]),
    }
    for compound in found["compounds"]["items"]:
        compound.runs_with_it = urlencode({"q": RunQuery(starts=(StartRange(compound.name),)).to_text()})
    nothing = not any(cut["items"] for cut in found.values())
    if problems and (nothing or _OF_A_FILTER.search(text)):
        context["problems"] = problems
    return render(request, "web/home/search.html", context | found | {"nothing": nothing})


def _conditions(text: str) -> tuple[RunQuery | None, list[str]]:
    """The conditions that the text states; None where it is a word or a beginning of a code, with what is wrong."""
    try:
        query = RunQuery.from_text(text)
    except InvalidInput as error:
        return None, filter_words(error)
    return (query if query != RunQuery(code=query.code) else None), []


def _cut(rows: Iterable[Any]) -> dict[str, Any]:
    """The first of the rows, and whether there are more."""
    listed = list(rows)
    return {"items": listed[:MOST], "more": len(listed) > MOST}


urlpatterns = [path("search/", search, name="search")]
