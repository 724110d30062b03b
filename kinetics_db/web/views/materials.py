"""Compounds, lots and stocks of a project, and the forms that enter them and their next revisions."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from django.contrib import messages
from django.http import HttpRequest, HttpResponse, QueryDict
from django.shortcuts import redirect, render
from django.urls import path, reverse

from kinetics_db.errors import InvalidInput, NotFound
from kinetics_db.materials.selectors import (
    compound_named,
    compounds_with_newest,
    lot_named,
    lots_in,
    material_names,
    names_behind,
    stock_named,
    stocks_in,
)
from kinetics_db.materials.services import enter_compound, enter_lot, make_up_stock
from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import project_named, project_with_role, require_contributor
from kinetics_db.web.forms import PlainForm, form_response, problems_shown, show_problem
from kinetics_db.web.material_forms import CompoundForm, LotForm, PortionForm, StockForm
from kinetics_db.web.pages import ReadersRequest, form_page, page
from kinetics_db.web.present.materials import compound_line, lot_line, stock_line
from kinetics_db.web.rows import Rows

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.projects.models import Project

UNITS = ("mg", "g", "uL", "mL", "umol", "mmol", "mol")
WORDS = {
    "compound": "Lots that were entered before keep the molar mass and density they were entered with; revise "
    "a lot too, so that it takes up the new ones. Runs that are logged already keep theirs.",
    "lot": "Stocks and runs that were made from it keep the purity that they were made with.",
    "stock": "Runs that used it keep the concentrations that they were logged with.",
}


@page
def materials(request: ReadersRequest, slug: str) -> HttpResponse:
    """The newest revision of everything that can be charged; each kind has its own pages."""
    project, role = project_with_role(user=request.user, slug=slug)
    user, asked = request.user, request.GET.get
    compounds = page_of(
        compounds_with_newest(user=user, project_id=project.pk),
        order=("compound__name", "id"),
        cursor=asked("compounds"),
    )
    lots = page_of(lots_in(user=user, project_id=project.pk), order=("lot__code", "id"), cursor=asked("lots"))
    stocks = page_of(
        stocks_in(user=user, project_id=project.pk), order=("stock__code", "id"), cursor=asked("stocks")
    )
    return render(
        request,
        "web/materials/list.html",
        {
            "project": project,
            "may_write": role != "reader",
            "compounds": [compound_line(revision) for revision in compounds.items],
            "lots": [lot_line(revision) for revision in lots.items],
            "stocks": [stock_line(revision) for revision in stocks.items],
            "pages": {"compounds": compounds, "lots": lots, "stocks": stocks},
        },
    )


@form_page
def new_compound(request: ReadersRequest, slug: str) -> HttpResponse:
    """Enter a compound; ``?revise=`` takes up the newest revision of one, ``?name=`` begins with a name."""
    project, name = _project(request, slug), request.GET.get("revise", "")
    begun = {"name": request.GET.get("name", "")}
    if name:
        begun = CompoundForm.begun(_newest(compound_named, project, name=name).content)
    form = CompoundForm(_sent(request), initial=begun)
    if request.method == "POST" and form.is_valid():
        with problems_shown(form, names=form.places):
            values = form.values()
            _still_free(request.user, project, "compound", "name", values["name"], revised=name)
            revision = enter_compound(user=request.user, project_id=project.pk, **values)
            return _stored(request, project, "compound", revision.compound.name, revision.number)
    return _shown(request, project, form, "compound", name)


@form_page
def new_lot(request: ReadersRequest, slug: str) -> HttpResponse:
    """Enter a lot; ``?revise=`` takes up the newest revision of one."""
    project, code = _project(request, slug), request.GET.get("revise", "")
    begun = {"code": request.GET.get("code", "")}
    if code:
        lot = _newest(lot_named, project, code=code)
        begun = LotForm.begun(lot.content, compound=lot.compound_revision.compound.name)
    form = LotForm(_sent(request), initial=begun)
    if request.method == "POST" and form.is_valid():
        with problems_shown(form, names=form.places):
            values = form.values()
            _still_free(request.user, project, "lot", "code", values["code"], revised=code)
            revision = enter_lot(user=request.user, project_id=project.pk, **values)
            return _stored(request, project, "lot", revision.lot.code, revision.number)
    return _shown(request, project, form, "lot", code)


@form_page
def new_stock(request: ReadersRequest, slug: str) -> HttpResponse:
    """Make up a stock from portions; ``?revise=`` takes up the newest revision of one."""
    project, code = _project(request, slug), request.GET.get("revise", "")
    begun: dict[str, str] = {"code": request.GET.get("code", "")}
    begun_rows: list[dict[str, str]] = []
    if code:
        content = _newest(stock_named, project, code=code).content
        digests = [portion["lot"] or portion["compound"] for portion in content["portions"]]
        names = names_behind(user=request.user, project_id=project.pk, digests=digests)
        begun, begun_rows = StockForm.begun(content, names)
    data = _sent(request)
    form, rows = StockForm(data, initial=begun), Rows(PortionForm, "portions", data=data, initial=begun_rows)
    changed = data is not None and rows.change_asked(data)
    if data is not None and not changed and all([form.is_valid(), rows.is_valid()]):
        portions = []
        for row in rows.filled:
            try:
                portions.append(row.portion())
            except InvalidInput as error:
                for problem in error.problems:
                    show_problem(row, problem, rows={}, names={})
        if all(not row.errors for row in rows.forms):
            with problems_shown(form, names=form.places, rows={"portions": _Numbered(rows.filled)}):
                values = form.values()
                _still_free(request.user, project, "stock", "code", values["code"], revised=code)
                revision = make_up_stock(
                    user=request.user, project_id=project.pk, portions=portions, **values
                )
                return _stored(request, project, "stock", revision.stock.code, revision.number)
    return _shown(request, project, form, "stock", code, rows=rows, stays=changed)


class _Numbered:
    """Rows that count as the service counts its portions."""

    def __init__(self, forms: list[PortionForm]):
        self.forms = forms


def _sent(request: HttpRequest) -> QueryDict | None:
    return request.POST if request.method == "POST" else None


def _project(request: ReadersRequest, slug: str) -> Project:
    project = project_named(user=request.user, slug=slug)
    require_contributor(user=request.user, project_id=project.pk)
    return project


def _newest(find: Callable[..., Any], project: Project, **named: str) -> Any:
    """The newest revision of a name that came with the address; NotFound for what no name can be."""
    (text,) = named.values()
    if "\0" in text or len(text) > 120:
        raise NotFound("there is nothing of that name in this project")
    return find(project_id=project.pk, **named)


def _still_free(user: User, project: Project, kind: str, field: str, name: str, *, revised: str) -> None:
    """Entering a known name again would revise it, so a new form refuses it, and a revision keeps its name."""
    if revised:
        if name != revised:
            raise InvalidInput(f"a {kind} keeps its {field}", field=field, cure=revised)
        return
    names = material_names(user=user, project_id=project.pk)
    known = {"compound": names.compounds, "lot": [code for code, _ in names.lots], "stock": names.stocks}
    if name in known[kind]:
        raise InvalidInput(
            f"there is a {kind} '{name}' already",
            field=field,
            cure="another, or revise that one from the list",
        )


def _stored(request: HttpRequest, project: Project, kind: str, name: str, number: int) -> HttpResponse:
    messages.success(request, f"{kind.capitalize()} {name} is stored (r{number}).")
    return redirect(f"{reverse('web:materials', args=[project.slug])}#{kind}s")


def _shown(
    request: ReadersRequest,
    project: Project,
    form: PlainForm,
    kind: str,
    revised: str,
    *,
    rows: Rows[PortionForm] | None = None,
    stays: bool = False,
) -> HttpResponse:
    """The form; a new material has no reason to give."""
    names = material_names(user=request.user, project_id=project.pk)
    context = {
        "project": project,
        "form": form,
        "fields": [field for field in form if revised or field.name != "reason"],
        "kind": kind,
        "revised": revised,
        "rows": rows,
        "words": WORDS[kind],
        "names": {"compound": names.compounds, "lot": [code for code, _ in names.lots]},
        "units": UNITS,
    }
    if stays:
        return render(request, "web/materials/form.html", context)
    return form_response(request, "web/materials/form.html", context)


urlpatterns = [
    path("projects/<slug:slug>/materials/", materials, name="materials"),
    path("projects/<slug:slug>/materials/compounds/new/", new_compound, name="new-compound"),
    path("projects/<slug:slug>/materials/lots/new/", new_lot, name="new-lot"),
    path("projects/<slug:slug>/materials/stocks/new/", new_stock, name="new-stock"),
]
