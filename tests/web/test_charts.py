"""Charts as the JSON and the figure that pages carry, and the small pictures of lists."""

from __future__ import annotations

import json
import re
import time
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from django.template import Context, Template

from kinetics_db.engine.tables import Column, Table
from kinetics_db.fits.curves import RunCurves, curves_of_fit
from kinetics_db.fits.selectors import result_of
from kinetics_db.measurements.selectors import current_tables_in
from kinetics_db.web.present.charts import (
    MOST_POINTS,
    Chart,
    ChartSeries,
    concentrations,
    name_of,
    positions_of,
    residuals,
    rounded,
    simulated,
)
from kinetics_db.web.present.units import Units
from kinetics_db.web.thumbnails import thumbnail
from tests.web.study import Study

UNITS = Units("mmol/L", "min")
TIMES = np.array([0.0, 60.0, 120.0, 600.0])


def table(unit: str = "mol/L", *, with_u: bool = True) -> Table:
    columns = [
        Column("time", "s", "time"),
        Column("acid", unit, "concentration"),
        Column("amide", unit, "concentration"),
    ]
    values = [TIMES, np.array([0.1, 0.08, np.nan, 0.0123456789]), np.array([0.0, 0.02, 0.03, 0.09])]
    if with_u:
        columns.append(Column("acid", unit, "standard uncertainty"))
        values.append(np.array([0.001, 0.001, np.nan, 0.0005]))
    return Table(tuple(columns), np.column_stack(values))


def chart_of(data: Table, **more: Any) -> dict[str, Any]:
    given: dict[str, Any] = {
        "basis": "mol/L",
        "title": "Run K01",
        "name": "Run K01, table 1",
        "units": UNITS,
        "positions": positions_of(["amide", "acid"]),
        **more,
    }
    return concentrations(data, **given).to_plain()


def curves(times: np.ndarray, values: np.ndarray, names: tuple[str, ...]) -> RunCurves:
    return RunCurves("K01", 1, 1, times, names, values, smooth=True)


def series(plain: dict[str, Any], name: str) -> dict[str, Any]:
    return next(s for s in plain["series"] if s["name"] == name)


def shown(chart: Chart, **more: Any) -> str:
    template = Template("{% load charts %}{% chart chart csv_url=csv_url %}")
    return template.render(Context({"chart": chart, "csv_url": "", **more}))


def test_a_table_is_told_in_the_units_of_the_page() -> None:
    plain = chart_of(table())
    assert (plain["kind"], plain["time_unit"], plain["value_unit"]) == ("concentrations", "min", "mmol/L")
    assert plain["x"] == [0, 1, 2, 10]
    assert series(plain, "acid")["y"] == [100, 80, None, 12.34568]
    assert series(plain, "acid")["u"] == [1, 1, None, 0.5]
    assert series(plain, "amide")["u"] is None
    assert json.loads(json.dumps(plain, allow_nan=False)) == plain


def test_positions_are_those_of_the_project_and_new_columns_come_after_them() -> None:
    plain = chart_of(table(), positions={"amide": 4})
    assert [(s["name"], s["position"]) for s in plain["series"]] == [("acid", 5), ("amide", 4)]
    assert positions_of(["b", "a", "b"]) == {"b": 0, "a": 1}


def test_a_fits_curves_are_found_by_the_casting() -> None:
    times = np.array([0.0, 30.0, 600.0])
    found = curves(times, np.array([[0.1, 0.0], [0.09, 0.01], [0.01, np.nan]]), ("S", "P"))
    plain = chart_of(table(), curves=found, casting={"acid": "S", "amide": None}, model_name="path v1")
    assert plain["model_x"] == [0, 0.5, 10] and plain["model_name"] == "path v1"
    assert series(plain, "acid")["model"] == {"x": None, "y": [100, 90, 10]}
    assert series(plain, "amide")["model"] is None
    both = chart_of(table(), curves=found, casting={"acid": "S", "amide": "P"})
    assert series(both, "amide")["model"]["y"] == [0, 10, None]


@pytest.mark.parametrize("unit", ["1", "%"])
def test_relative_tables_and_their_curves_are_percentages(unit: str) -> None:
    found = curves(np.array([0.0, 600.0]), np.array([[90.0], [50.0]]), ("acid",))
    plain = chart_of(table(unit), basis="relative", curves=found)
    per = 100 if unit == "1" else 1
    assert plain["value_unit"] == "%"
    assert series(plain, "acid")["y"][0] == pytest.approx(0.1 * per)
    assert series(plain, "acid")["model"]["y"] == [90, 50]


def test_left_out_points_are_told_by_their_rows() -> None:
    plain = chart_of(table(), left_out={"acid": {3, 0}})
    assert series(plain, "acid")["left_out"] == [0, 3]
    assert series(plain, "amide")["left_out"] == []


def test_long_tables_are_thinned_out_with_their_left_out_points_in_place() -> None:
    n = 5001
    x = np.arange(float(n))
    chart = Chart(
        "concentrations", "t", "n", "s", "mol/L", [ChartSeries("A", 0, x, x, x, left_out=[0, n - 1, 1])]
    )
    plain = chart.to_plain()
    assert plain["thinned"] and len(plain["x"]) == MOST_POINTS
    assert (plain["x"][0], plain["x"][-1]) == (0, n - 1)
    assert plain["series"][0]["left_out"] == [0, MOST_POINTS - 1]
    assert len(plain["series"][0]["u"]) == MOST_POINTS
    assert not chart_of(table())["thinned"]


def test_series_with_their_own_times_keep_them() -> None:
    own = [ChartSeries("A", 0, TIMES, TIMES), ChartSeries("B", 1, TIMES[:2], TIMES[:2])]
    plain = Chart("concentrations", "t", "n", "s", "mol/L", own).to_plain()
    assert plain["x"] is None and plain["model_x"] is None
    assert [s["x"] for s in plain["series"]] == [[0, 60, 120, 600], [0, 60]]


def test_a_simulation_has_lines_and_no_points() -> None:
    chart = simulated(
        {"A": (TIMES, np.full(4, 0.05))}, basis="mol/L", title="t", name="n", units=UNITS, positions={"A": 2}
    )
    plain = chart.to_plain()
    assert plain["x"] == [] and plain["model_x"] == [0, 1, 2, 10]
    assert plain["series"][0]["position"] == 2
    assert plain["series"][0]["model"]["y"] == [50, 50, 50, 50]


def test_numbers_keep_seven_digits_and_whole_ones_are_short() -> None:
    values = np.array([1.0, 1234.56789, 1.23456789e-9, -0.0, np.nan, np.inf, 3e20])
    assert json.dumps(rounded(values)) == "[1, 1234.568, 1.234568e-09, 0, null, null, 3e+20]"


def test_names_of_downloads_hold_nothing_that_a_file_system_minds() -> None:
    assert name_of("Run K01, table 2") == "Run-K01-table-2"
    assert name_of("../../étc: <x>") == "tc-x"
    assert name_of("«»") == "chart"
    assert len(name_of("x" * 500)) == 80


def test_the_figure_carries_its_numbers_words_and_the_way_to_the_csv() -> None:
    chart = concentrations(
        table(), basis="mol/L", title="Run <K01>", name="K01", units=UNITS, positions=positions_of(["acid"])
    )
    html = shown(chart, csv_url="/tables/3.csv")
    assert "Run &lt;K01&gt;" in html and "<K01>" not in html
    data = re.search(r'<script type="application/json">(.*?)</script>', html)
    assert data is not None and json.loads(data[1]) == chart.to_plain()
    assert ", " not in data[1].replace("Run <K01>", "")
    assert "acid: 3 points, from 100 to 12.3 mmol/L between 0 and 10 min" in html
    assert re.search(r'<noscript>.*href="/tables/3.csv".*</noscript>', html, re.DOTALL)
    assert 'data-csv="/tables/3.csv"' in html
    assert "<a " not in shown(chart)


def test_hostile_names_cannot_leave_the_json() -> None:
    name = "</script><script>alert(1)</script><!--"
    html = shown(Chart("concentrations", name, "n", "s", "mol/L", [ChartSeries(name, 0, TIMES, TIMES)]))
    assert html.count("<script") == 1 and html.count("</script>") == 1 and "<!--" not in html


def test_a_chart_without_values_says_so_in_words() -> None:
    chart = Chart("concentrations", "t", "n", "s", "mol/L", [ChartSeries("A", 0, np.zeros(0), np.zeros(0))])
    assert "A: no values" in shown(chart)


def test_a_stored_fit_becomes_charts_of_curves_and_residuals(fitted: Study) -> None:
    record = current_tables_in(user=fitted.user, project_id=fitted.project.pk)[0]
    fit = fitted.project.fits.select_related("mechanism_version", "dataset").order_by("pk")[0]
    result = result_of(fit)
    assert result is not None
    casting = fit.content["casting"]["columns"]
    found = next(c for c in curves_of_fit(fit=fit, result=result) if c.table_id == record.pk)
    plain = chart_of(record.table, positions={}, curves=found, casting=casting)
    acid = series(plain, "alcohol")
    at = [plain["model_x"].index(t) for t in rounded(np.array(plain["x"]), 5)]
    distance = np.array([acid["model"]["y"][i] for i in at]) - np.array(acid["y"])
    assert np.all(np.abs(distance) < 5 * np.array(acid["u"]))
    experiment = result.content["experiments"][0]
    drawn = residuals(experiment, title="t", name="n", units=UNITS, positions={"alcohol": 3}, casting=casting)
    told = drawn.to_plain()
    assert (told["kind"], told["value_unit"]) == ("residuals", "")
    assert [(s["name"], s["position"]) for s in told["series"]] == [("alcohol", 3), ("ketone", 4)]
    assert told["series"][0]["y"] == pytest.approx([row[0] for row in experiment["standardised"]], rel=1e-6)


def test_residuals_are_called_as_the_columns_they_were_cast_from() -> None:
    experiment = {
        "times": [0.0, 60.0],
        "observed_names": ["P", "S"],
        "standardised": [[1.0, None], [-1.0, 2.0]],
    }
    chart = residuals(
        experiment,
        title="t",
        name="n",
        units=UNITS,
        positions=positions_of(["amine", "amide"]),
        casting={"amine": "S", "amide": "P", "other": None},
    )
    plain = chart.to_plain()
    assert [(s["name"], s["position"], s["y"]) for s in plain["series"]] == [
        ("amide", 1, [1, -1]),
        ("amine", 0, [None, 2]),
    ]
    assert plain["x"] == [0, 1]


LINES = [
    (i, np.linspace(0.0, 3600.0, 40), 0.1 * np.exp(-np.linspace(0.0, 12.0, 40) / (1 + i))) for i in range(6)
]


def test_a_thumbnail_is_a_small_picture_with_a_title_only() -> None:
    svg = ElementTree.fromstring(thumbnail("Run <K01>: acid", LINES))
    assert svg.attrib["viewBox"] == "0 0 120 40"
    assert [e.tag for e in svg] == ["title"] + ["path"] * 6
    assert svg[0].text == "Run <K01>: acid"
    assert {e.get("class") for e in svg[1:]} == {f"c{i}" for i in range(6)}


def test_the_lines_of_a_thumbnail_rise_and_fall_as_the_values_do() -> None:
    svg = ElementTree.fromstring(thumbnail("t", [(0, np.array([0.0, 10.0]), np.array([1.0, 0.0]))]))
    assert svg[1].get("d") == "M2 2L118 38"


def test_a_thumbnail_passes_over_what_has_no_value() -> None:
    nothing = ElementTree.fromstring(
        thumbnail("t", [(0, np.zeros(0), np.zeros(0)), (1, TIMES, np.full(4, np.nan))])
    )
    assert [e.get("class") for e in nothing[1:]] == ["axis"]
    single = thumbnail("t", [(0, np.array([5.0]), np.array([0.0]))])
    assert "nan" not in single and ElementTree.fromstring(single)[1].get("d") == "M2 38h0"


def test_fifty_thumbnails_are_made_quickly_and_weigh_little() -> None:
    begun = time.process_time()
    pictures = [thumbnail("Run K01: acid, amine", LINES) for _ in range(50)]
    assert (time.process_time() - begun) / 50 < 1.5e-3
    assert max(len(p) for p in pictures) < 2000
    rng = np.random.default_rng(1)
    many = [(i, np.arange(5000.0), rng.random(5000)) for i in range(40)]
    assert len(thumbnail("<" * 500, many)) < 2000
