"""How forms show what the services refuse: each problem at the field where it happened, the input kept."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

from django import forms
from django.forms.renderers import TemplatesSetting
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render

from kinetics_db.errors import Conflict, InvalidInput, Problem


class FormRenderer(TemplatesSetting):
    """Fields with our own markup: label, control, hint, what is wrong."""

    field_template_name = "web/form/field.html"


class PlainForm(forms.Form):
    """Base of all forms. Limits on content are the services'; a form only keeps and shows."""

    use_required_attribute = False
    """The service says what is missing, with what would be accepted; browsers say it in their own words."""

    def __init__(self, *args: Any, **kwargs: Any):
        kwargs.setdefault("label_suffix", "")
        super().__init__(*args, **kwargs)


@contextmanager
def problems_shown(
    form: forms.BaseForm,
    *,
    rows: Mapping[str, Any] | None = None,
    names: Mapping[str, str] | None = None,
) -> Iterator[None]:
    """Put what a service refuses inside this block to the form's fields; the code after the block goes on.

    ``rows`` are formsets by the first word of a problem's field: 'charges.2.amount' is the field 'amount' of
    the second form of ``rows["charges"]``. ``names`` renames fields: {'density': 'density_value'}.
    """
    try:
        yield
    except InvalidInput as error:
        for problem in error.problems:
            show_problem(form, problem, rows=rows or {}, names=names or {})
    except Conflict as error:
        form.add_error(None, sentence(str(error)))


def show_problem(
    form: forms.BaseForm, problem: Problem, *, rows: Mapping[str, Any], names: Mapping[str, str]
) -> None:
    """Put one problem where it belongs; what belongs nowhere stands on top with its place in words."""
    words = problem_words(problem)
    field = problem.field or ""
    first, _, rest = names.get(field, field).partition(".")
    if first in rows:
        number, _, inner = rest.partition(".")
        forms_of = rows[first].forms
        if number.isdecimal() and 1 <= int(number) <= len(forms_of):
            row = forms_of[int(number) - 1]
            inner = names.get(inner, inner).partition(".")[0]
            row.add_error(inner if inner in row.fields else None, words)
            return
        form.add_error(None, words)
        return
    if first in form.fields:
        form.add_error(first, words)
    else:
        form.add_error(None, f"{field}: {words}" if field else words)


def problem_words(problem: Problem) -> str:
    """A problem as a sentence without its field, which the place on the page tells."""
    place = ""
    if problem.line is not None:
        place = f"line {problem.line}" + (f", column {problem.column}" if problem.column is not None else "")
        place += ": "
    cure = f" ({problem.cure})" if problem.cure else ""
    return sentence(f"{place}{problem.message}{cure}")


def filter_words(error: InvalidInput) -> list[str]:
    """What is wrong with a filter of one line, each problem with the character where it begins."""
    return [
        ("" if p.column is None else f"At character {p.column}: ") + problem_words(replace(p, line=None))
        for p in error.problems
    ]


def sentence(text: str) -> str:
    """A message with a capital at its beginning, the rest as it is."""
    return text[:1].upper() + text[1:]


def form_response(request: HttpRequest, template: str, context: Mapping[str, Any]) -> HttpResponse:
    """The page with its form: 200 when it is shown first, 422 when it comes back to be corrected."""
    return render(request, template, dict(context), status=422 if request.method == "POST" else 200)
