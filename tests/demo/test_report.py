"""The report for a terminal."""

from __future__ import annotations

import re
from types import SimpleNamespace
from typing import Any

from kinetics_db.datasets.selectors import Staleness
from kinetics_db.demo.report import (
    columns_of,
    constants_text,
    grid_text,
    label,
    place_key,
    side_by_side,
)
from kinetics_db.engine.comparison import Thresholds
from kinetics_db.evidence.selectors import Cell, Grid, GridColumn


def constant(base: str, **changes: Any) -> dict[str, Any]:
    whole = {
        "base": base, "kind": "constant", "place": None, "unit": "L/mol/s", "value": 1.701e-4,
        "standard_error": 4.03e-7, "lower": 1.693e-4, "upper": 1.709e-4,
        "determined": True, "why_not": "", "set_by_prior": False,
    }  # fmt: skip
    return whole | changes


def lines_of(*parameters: dict[str, Any]) -> list[str]:
    dataset = SimpleNamespace(name="all", number=2)
    fit = SimpleNamespace(mechanism_version="direct v1", dataset=dataset)
    content = {"points": 12, "confidence": 0.95, "parameters": parameters}
    result = SimpleNamespace(content=content, status="converged", seconds=1.25)
    return constants_text(fit, result).splitlines()


def test_a_constant_has_a_line_in_ascii_with_its_uncertainty_unit_and_interval() -> None:
    title, _, line = lines_of(constant("k1"), constant("pull of r1", kind="nuisance"))
    assert title == "direct v1 on the dataset 'all', version 2: converged in 1.2 s, 12 values"
    cells = re.split(" {2,}", line.strip())
    assert cells == ["k1", "all runs", "1.7010(40)e-4", "L/mol/s", "(1.693 to 1.709)e-4"]


def test_a_constant_that_is_not_determined_has_few_digits_and_the_reason() -> None:
    loose = constant("k1", determined=False, lower=None, upper=None, why_not="only k1/k2 is determined")
    line = lines_of(loose)[-1]
    assert line.split()[3:5] == ["1.7e-4", "L/mol/s"]
    assert line.endswith("not determined: only k1/k2 is determined")


def test_a_constant_set_by_its_prior_says_so() -> None:
    assert lines_of(constant("k1", set_by_prior=True))[-1].endswith("(1.693 to 1.709)e-4  (set by its prior)")


def test_columns_of_a_grid_are_lettered_beyond_the_alphabet() -> None:
    assert [label(i) for i in (0, 25, 26, 27, 52)] == ["A", "Z", "AA", "AB", "BA"]


def test_temperatures_are_put_in_the_order_of_their_numbers() -> None:
    assert sorted(["98.00 K", "298.15 K", "run 2", "", "100.00 K"], key=place_key) == [
        "98.00 K", "100.00 K", "298.15 K", "", "run 2",
    ]  # fmt: skip


def test_rows_are_aligned_and_cut_at_the_width_of_the_terminal() -> None:
    lines = columns_of([("a", "12", "x"), ("long", "3", "y" * 200)], right=(1,))
    assert lines[0] == "  a     12  x"
    assert lines[1].startswith("  long   3  yyy") and lines[1].endswith("...") and len(lines[1]) == 100


def column(
    fit_id: int, *, delta: float | None = None, status: str = "converged", stale: str = ""
) -> GridColumn:
    return GridColumn(
        fit_id=fit_id,
        mechanism=f"mechanism {fit_id} " + "with a long name " * 8,
        dataset="all v1",
        status=status,
        aicc=1.0,
        bic=1.0,
        stale=Staleness((stale,) if stale else ()),
        delta_aicc=delta,
    )


def cell(verdict: str, fit_id: int, **more: Any) -> Cell:
    return Cell(verdict, 0.5, 0.01, fit_id, "t1", **({"observable": "ester"} | more))


def text_of(grid: Grid, limits: Thresholds | None = None) -> str:
    return grid_text(grid, {c.fit_id: c.mechanism for c in grid.columns}, limits or Thresholds())


def test_the_grid_has_runs_down_and_versions_across_with_their_verdicts() -> None:
    grid = Grid(
        ("r1", "r2"),
        (column(1, delta=0.0), column(2, delta=1234.56)),
        {("r1", 1): cell("agrees", 1), ("r1", 2): cell("disagrees", 2), ("r2", 2): cell("strained", 2)},
    )
    rows = [line.split() for line in text_of(grid).splitlines()]
    assert ["run", "A", "B"] in rows
    assert ["r1", "agrees", "disagrees"] in rows
    assert ["r2", ".", "strained"] in rows
    assert ["AICc", "above", "the", "lowest", "0.0", "1234.6"] in rows


def test_every_verdict_that_occurs_is_explained_and_no_other() -> None:
    text = text_of(Grid(("r1",), (column(1),), {("r1", 1): cell("consistent", 1)}))
    explained = [
        line.split("  ")[0] for line in text.splitlines() if line.startswith(("agrees", "consistent"))
    ]
    assert explained == ["consistent"]


def test_a_grid_of_many_versions_and_long_names_stays_within_100_columns() -> None:
    columns = tuple(column(i, delta=float(10**i)) for i in range(1, 16))
    runs = tuple("a run with a long code " * 3 + str(i) for i in range(3))
    cells = {(run, c.fit_id): cell("not tested", c.fit_id) for run in runs for c in columns}
    for verdict, c in (("strained", columns[0]), ("disagrees", columns[1])):
        cells[runs[0], c.fit_id] = cell(verdict, c.fit_id, observable="an observable " * 10)
    text = text_of(Grid(runs, columns, cells))
    assert max(map(len, text.splitlines())) <= 100
    assert text.count("not tested") == 3 * 15 - 2 + 1
    heads = [name for line in text.splitlines() if line.startswith("run ") for name in line.split()[1:]]
    assert heads == [label(i) for i in range(15)]


def test_a_stale_or_unconverged_fit_says_so_beside_its_name() -> None:
    stale = "run r1 has been revised"
    grid = Grid((), (column(1, status="not converged"), column(2, stale=stale)), {})
    text = text_of(grid)
    assert f"stale: {stale}" in text
    assert "A  (not converged) mechanism 1" in text
    assert "B  mechanism 2" in text


def test_a_project_without_fits_says_so_instead_of_showing_an_empty_grid() -> None:
    assert text_of(Grid(("r1",), (), {})) == "No fit has a result yet."


def decided(cells: dict[tuple[str, int], Cell], limits: Thresholds | None = None) -> list[str]:
    """Lines of the report on what decided."""
    columns = tuple(column(fit_id) for fit_id in sorted({fit_id for _, fit_id in cells}))
    runs = tuple(sorted({run for run, _ in cells}))
    text = text_of(Grid(runs, columns, cells), limits)
    _, _, rest = text.partition("What decided\n")
    return rest.partition("NRMSE:")[0].splitlines()


def test_a_test_that_failed_is_named_with_the_p_and_error_of_one_observable() -> None:
    lines = decided(
        {
            ("r1", 1): cell("disagrees", 1, pull=-40.0, pull_name="run r1: charge 2"),
            ("r2", 1): cell("strained", 1, observable="acid", pull=2.9, pull_name="run r2: charge 2"),
            ("r3", 1): cell("agrees", 1),
        }
    )
    assert lines == [
        "  A strained", "     r2 acid: p 0.50, NRMSE 1.0 %", "  A disagrees", "     r1 ester: p 0.50, NRMSE 1.0 %",
    ]  # fmt: skip


def test_a_pull_that_decided_is_named_without_repeating_the_run() -> None:
    lines = decided(
        {
            ("r1", 1): cell("strained", 1, pull=10.06, pull_name="run r1: charge 5"),
            ("r2", 1): cell("strained", 1, pull=-3.3, pull_name="lot L-2 purity"),
        }
    )
    assert lines[0] == "  A strained"
    assert re.split(" {3,}", lines[1].strip()) == [
        "r1 charge 5 pulled +10.1 u",
        "r2 lot L-2 purity pulled -3.3 u",
    ]


def test_a_cause_that_runs_share_is_named_once_with_all_of_them() -> None:
    shared = {"pull": 26.4, "pull_name": "lot B-1 purity"}
    cells = {(f"r{i:02}", 1): cell("strained", 1, **shared) for i in range(1, 31)}
    cells["r31", 1] = cell("strained", 1, pull=-10.3, pull_name="lot L-1 purity")
    first, *wrapped, last = decided(cells)[1:]
    assert first.startswith("     lot B-1 purity pulled +26.4 u: r01, r02, ")
    assert all(line.startswith(" " * 7 + "r") and len(line) <= 100 for line in wrapped)
    assert " ".join([first, *wrapped]).count("r") == 30 + "lot B-1 purity".count("r")
    assert last == "     r31 lot L-1 purity pulled -10.3 u"


def test_whether_a_pull_decided_is_a_matter_of_the_projects_own_threshold() -> None:
    cells = {("r1", 1): cell("strained", 1, pull=4.0, pull_name="run r1: charge 5")}
    assert decided(cells)[-1].endswith("charge 5 pulled +4 u")
    assert decided(cells, Thresholds(pull=5.0))[-1].endswith("ester: p 0.50, NRMSE 1.0 %")


def test_where_every_run_agrees_there_is_nothing_to_say_on_what_decided() -> None:
    assert decided({("r1", 1): cell("agrees", 1), ("r2", 1): cell("not tested", 1)}) == []


def test_short_texts_stand_side_by_side_in_equal_columns() -> None:
    lines = side_by_side(["a" * 30, "b", "c", "d"], indent=4)
    assert lines == ["    " + "a" * 30 + "   " + "b".ljust(30) + "   " + "c".ljust(30).rstrip(), "    d"]
    (line,) = side_by_side(["x" * 300], indent=4)
    assert len(line) == 100 and line.endswith("...")
