"""The one page of a project: what is under way, the evidence, the models, the runs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from django.http import HttpResponse
from django.shortcuts import render

from kinetics_db.datasets.selectors import table_ids_of
from kinetics_db.evidence.selectors import Grid, grid_of
from kinetics_db.fits.selectors import contents_of, fits_in
from kinetics_db.jobs.selectors import jobs_for
from kinetics_db.measurements.selectors import current_tables_in
from kinetics_db.mechanisms.selectors import versions_in
from kinetics_db.projects.selectors import project_named, role_in
from kinetics_db.runs.selectors import newest_revisions_in
from kinetics_db.web.pages import ReadersRequest, page
from kinetics_db.web.present.grid import grid_sheet
from kinetics_db.web.present.models import FitsOfPage, curves_of, fits_of_page, model_sheets
from kinetics_db.web.present.runs import run_sheets, units_of

if TYPE_CHECKING:
    from kinetics_db.fits.models import Fit

SECONDS_BETWEEN_LOOKS = 3
HEAVY_OF_FITS = ("dataset__canonical", "mechanism_version__canonical")
HEAVY_OF_TABLES = (
    "signal_table__canonical",
    "signal_table__blob",
    "signal_table__file__canonical",
    "reduction__canonical",
)


@page
def project(request: ReadersRequest, slug: str) -> HttpResponse:
    """Everything of a project on one page. ``?curve=`` chooses the fit whose curves are drawn, ``?hold`` stops
    the page from loading itself again while fits are under way."""
    user = request.user
    found = project_named(user=user, slug=slug)
    revisions = list(newest_revisions_in(user=user, project_id=found.pk))
    tables_found = (
        current_tables_in(user=user, project_id=found.pk)
        .select_related("signal_table__file__stored")
        .defer(*HEAVY_OF_TABLES)
    )
    tables = [(record, record.table) for record in tables_found]
    fits = fits_of_page(list(fits_in(user=user, project_id=found.pk).defer(*HEAVY_OF_FITS)))
    jobs = jobs_for(kind="fit", subject_ids=[fit.pk for fit in fits.newest])
    contents = contents_of(list(fits.results.values()))
    grid = grid_of(user=user, project_id=found.pk)
    drawn = _drawn_fit(request.GET.get("curve"), fits, grid)
    curves = {}
    if drawn is not None:
        content = contents[fits.results[drawn.pk].pk]
        curves = curves_of(content, drawn.content["casting"]["columns"], table_ids_of(drawn.dataset_id))
    units = units_of(revisions, tables)
    model_name = str(drawn.mechanism_version) if drawn is not None else ""
    runs = run_sheets(revisions, tables, curves, units=units, model_name=model_name)
    models = model_sheets(list(versions_in(user=user, project_id=found.pk)), fits, jobs, contents)
    under_way = [fit for model in models for fit in model.fits if fit.is_open]
    return render(
        request,
        "web/project.html",
        {
            "project": found,
            "role": role_in(user=user, project_id=found.pk),
            "runs": runs,
            "models": models,
            "grid": grid_sheet(grid, runs, found.verdict_thresholds),
            "fits": {fit.pk: fit for fit in fits.newest},
            "under_way": under_way,
            "held": "hold" in request.GET,
            "refresh": SECONDS_BETWEEN_LOOKS if under_way and "hold" not in request.GET else None,
            "drawn": drawn,
            "curve_choices": fits.curve_choices,
        },
    )


def _drawn_fit(asked: str | None, fits: FitsOfPage, grid: Grid) -> Fit | None:
    """The fit whose curves are drawn: the one asked for ('none' draws none), else the newest that has the
    lowest AICc among those compared with it, else the newest."""
    choices = {str(fit.pk): fit for fit in fits.curve_choices}
    if asked is not None:
        return choices.get(asked)
    best = (str(column.fit_id) for column in grid.columns if column.delta_aicc == 0.0)
    leading = max((fit_id for fit_id in best if fit_id in choices), key=int, default=None)
    return choices[leading] if leading is not None else next(iter(choices.values()), None)
