"""Every layout of an export file is read back as what was measured."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from kinetics_db.demo.invented.exports import LAYOUTS, export_file
from kinetics_db.demo.invented.plan import PlannedRun
from kinetics_db.demo.invented.reality import Exported
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.engine import reading
from kinetics_db.runs.entry import Amount

COLUMNS = ("substrate", "product", "reference")
TIMES = np.array([18.0, 90.0, 612.0, 3600.0, 7308.0])
INTEGRALS = np.array(
    [
        [12.3456, -0.0123, 99.1],
        [10.5, 1.75, 100.2],
        [7.25, np.nan, 99.9],
        [3.0, 9.125, 100.0],
        [0.5, 11.5, 98.75],
    ]
)


def exported(layout: str) -> Exported:
    run = PlannedRun("X-1", 25.0, (), Amount(10.0, "mL"), tuple(TIMES), layout, 1.0)
    return Exported(run, TIMES, COLUMNS, INTEGRALS, 0.5)


@pytest.mark.parametrize("layout", LAYOUTS)
def test_times_come_back_in_seconds_and_integrals_to_the_digits_written(layout: str) -> None:
    _, data = export_file(exported(layout))
    table = reading.read(data).table
    assert table.columns[0].unit == "s"
    np.testing.assert_allclose(table.times, TIMES, rtol=0, atol=1e-9)
    assert sorted(table.names("signal")) == sorted(COLUMNS)
    for i, name in enumerate(COLUMNS):
        np.testing.assert_allclose(table.column(name, "signal"), INTEGRALS[:, i], rtol=1e-6, atol=5.1e-5)


@pytest.mark.parametrize("layout", LAYOUTS)
def test_every_signal_is_read_in_arbitrary_units(layout: str) -> None:
    _, data = export_file(exported(layout))
    assert {column.unit for column in reading.read(data).table.columns[1:]} == {"a.u."}


@pytest.mark.parametrize(
    ("layout", "said"),
    [
        ("commented commas", "decimal sign: point"),
        ("commented commas", "its numbers in min"),
        ("semicolons", "Windows-1252"),
        ("semicolons", "decimal sign: comma"),
        ("semicolons", "a delimiter at the end of lines is ignored"),
        ("units row", "line 3 holds the units"),
        ("units row", "n.d."),
        ("stop watch", "colons"),
        ("spreadsheet", "states the delimiter"),
        ("spreadsheet", "its numbers in h"),
        ("spreadsheet", "UTF-8 with a byte order mark"),
        ("aligned", "columns are separated by blanks"),
    ],
)
def test_the_reader_says_how_it_understood_the_file(layout: str, said: str) -> None:
    _, data = export_file(exported(layout))
    notes = reading.read(data).notes
    assert any(said in note for note in notes), notes


@pytest.mark.parametrize("layout", LAYOUTS)
def test_a_missing_cell_is_missing_and_no_other(layout: str) -> None:
    _, data = export_file(exported(layout))
    table = reading.read(data).table
    assert np.isnan(table.column("product", "signal")[2])
    assert int(np.isnan(table.values).sum()) == 1


def test_the_plan_uses_every_layout_and_several_normalisations() -> None:
    assert {run.layout for run in PLAN.runs} == set(LAYOUTS)
    assert len({run.gain for run in PLAN.runs}) > 3


def test_files_of_a_run_in_two_layouts_differ_but_say_the_same() -> None:
    one = exported("semicolons")
    other = replace(one, run=replace(one.run, layout="aligned"))
    first, second = reading.read(export_file(one)[1]).table, reading.read(export_file(other)[1]).table
    assert export_file(one)[1] != export_file(other)[1]
    for name in COLUMNS:
        np.testing.assert_allclose(first.column(name, "signal"), second.column(name, "signal"), atol=5.1e-5)
