"""Pages of the tests with charts on them, in the layout and under the content policy of the real ones."""

from __future__ import annotations

import numpy as np
from django.http import HttpRequest, HttpResponse
from django.template import RequestContext, Template
from django.urls import path

from kinetics_db.engine.tables import Column, Table
from kinetics_db.fits.curves import RunCurves
from kinetics_db.web.present.charts import (
    Chart,
    ChartSeries,
    concentrations,
    positions_of,
    residuals,
    simulated,
)
from kinetics_db.web.present.units import Units

UNITS = Units("mmol/L", "min")
SPECIES = ("lactone", "amine", "amide", "dimer", "acid <free>", "trace & tail")
LAYOUT = Template(
    '{% extends "web/base.html" %}{% load charts %}'
    "{% block head %}{% chart_assets %}{% endblock %}"
    "{% block scripts %}{% load static %}"
    "<script defer src=\"{% static 'web/vendor/htmx-2.0.11.min.js' %}\"></script>{% endblock %}"
    '{% block content %}<section class="leaf first"><div class="work"><h1>Charts</h1>'
    '<button id="more" hx-get="/charts/part/" hx-target="#part">More</button><div id="part"></div>'
    '{% for one in charts %}{% chart one csv_url="/charts/all.csv" %}{% endfor %}</div>'
    '<aside class="margin"><p>made for a test</p></aside></section>{% endblock %}'
)
PART = Template("{% load charts %}{% chart one %}")


def curve(i: int, times: np.ndarray, rate: float = 1.0) -> np.ndarray:
    """Values of the i-th species in mol/L at times in s."""
    k = rate * 2e-3 / (1 + i)
    falling = np.exp(-k * times)
    return (0.0005 if i == 5 else 0.1) * (falling if i % 2 == 0 else 1.0 - falling)


def run_chart(number: int, *, species: int = 6, points: int = 30) -> Chart:
    """A run with points, error bars and the curves of a fit."""
    times = np.linspace(0.0, 3600.0, points)
    dense = np.unique(np.concatenate([np.linspace(0.0, 3600.0, 120), times]))
    names = SPECIES[:species]
    rate = 0.6 + 0.05 * number
    noise = np.random.default_rng(number).normal(0.0, 1.0, (points, species))
    exact = np.stack([curve(i, times, rate) for i in range(species)], axis=1)
    spread = 0.02 * np.abs(exact) + 1e-4 * exact.max(axis=0)
    columns = [Column("time", "s", "time"), *(Column(n, "mol/L", "concentration") for n in names)]
    columns += [Column(n, "mol/L", "standard uncertainty") for n in names]
    table = Table(tuple(columns), np.column_stack([times, exact + spread * noise, spread]))
    model = np.stack([curve(i, dense, rate) for i in range(species)], axis=1)
    return concentrations(
        table,
        basis="mol/L",
        title=f"Run K{number:02}: concentrations over time",
        name=f"K{number:02}, table 1",
        units=UNITS,
        positions=positions_of(names),
        curves=RunCurves(f"K{number:02}", number, number, dense, names, model, smooth=True),
        left_out={names[0]: [3, 7]},
        model_name="slow path, version 2",
    )


def residual_chart() -> Chart:
    times = np.linspace(0.0, 3600.0, 30)
    experiment = {
        "times": times.tolist(),
        "observed_names": list(SPECIES[:2]),
        "standardised": np.random.default_rng(5).normal(0.0, 1.2, (30, 2)).tolist(),
    }
    positions = positions_of(SPECIES)
    return residuals(
        experiment, title="Run K01: residuals", name="K01 residuals", units=UNITS, positions=positions
    )


def simulated_chart() -> Chart:
    times = np.linspace(0.0, 3600.0, 200)
    curves = {name: (times, curve(i, times)) for i, name in enumerate(SPECIES[:4])}
    return simulated(
        curves,
        basis="mol/L",
        title="What would happen",
        name="prediction",
        units=UNITS,
        positions={},
        model_name="fast path",
    )


def plain_chart() -> Chart:
    """Two species with few points, one of them at zero, for counting."""
    times = np.array([0.0, 10.0, 20.0, 40.0])
    a, b = np.array([100.0, 80.0, np.nan, 40.0]), np.array([0.0, 10.0, 30.0, 60.0])
    series = [
        ChartSeries("A", 0, times, a, np.array([4.0, 4.0, 4.0, 4.0])),
        ChartSeries("B", 1, times, b, None, left_out=[1]),
    ]
    return Chart("concentrations", "Two & <three>", "two-three", "min", "mmol/L", series)


PAGES = {
    "many": lambda: [run_chart(i) for i in range(1, 36)],
    "one": lambda: [run_chart(1)],
    "kinds": lambda: [run_chart(2), residual_chart(), simulated_chart()],
    "plain": lambda: [plain_chart()],
    "none": list,
}


def charts(request: HttpRequest, which: str) -> HttpResponse:
    return HttpResponse(LAYOUT.render(RequestContext(request, {"charts": PAGES[which]()})))


def part(request: HttpRequest) -> HttpResponse:
    return HttpResponse(PART.render(RequestContext(request, {"one": plain_chart()})))


def csv(request: HttpRequest) -> HttpResponse:
    headers = {"Content-Disposition": 'attachment; filename="all.csv"'}
    return HttpResponse("time / min,A\r\n0,100\r\n", content_type="text/csv", headers=headers)


urlpatterns = [
    path("charts/part/", part),
    path("charts/all.csv", csv),
    path("charts/<slug:which>/", charts),
]
