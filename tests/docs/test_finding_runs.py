"""The page about finding runs says what both ways of asking understand, and that they mean the same."""

from __future__ import annotations

import re
from urllib.parse import parse_qsl

import pytest

from kinetics_db.errors import InvalidInput
from kinetics_db.runs import query_text
from kinetics_db.runs.query import RUN_ORDERS, Range, RunQuery
from kinetics_db.runs.query_params import PARAMETERS
from tests.docs.fences import DOCS

PAGE = (DOCS / "reference" / "finding-runs.md").read_text(encoding="utf-8")


def rows_under(heading: str) -> list[list[str]]:
    """Cells of the table's rows below a heading, without the head."""
    text = PAGE.split(f"\n## {heading}\n", 1)[1].split("\n## ", 1)[0]
    lines = [line for line in text.splitlines() if line.startswith("|")][2:]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines]


def ticked(cell: str) -> list[str]:
    return re.findall(r"`([^`]+)`", cell)


CONDITIONS = [(ticked(line)[0], ticked(rest)[0]) for line, rest, _ in rows_under("The conditions")]
RANGES = [(one, row[1]) for row in rows_under("Ranges") for one in ticked(row[0])]
REFUSED = [(ticked(line)[0], ticked(answer)[0]) for line, answer in rows_under("What is refused")]


def params_of(text: str) -> dict[str, str]:
    return dict(parse_qsl(text, strict_parsing=True))


@pytest.mark.parametrize(("line", "params"), CONDITIONS)
def test_both_ways_of_asking_for_a_condition_mean_the_same(line: str, params: str) -> None:
    query = RunQuery.from_text(line)
    assert query and query == RunQuery.from_params(params_of(params))
    assert RunQuery.from_text(query.to_text()) == query


def test_every_parameter_and_every_word_is_documented() -> None:
    assert {name for _, params in CONDITIONS for name in params_of(params)} == set(PARAMETERS)
    words = {match[0].lower() for line, _ in CONDITIONS if (match := re.match(r"[A-Za-z]+(?= )", line))}
    assert words == {*query_text._WORDS, "t", "v"}


def test_all_conditions_of_the_page_may_stand_in_one_line() -> None:
    kept: dict[str, str] = {}
    for line, params in CONDITIONS:
        kept.setdefault(next(iter(params_of(params))).split("_")[0], line)
    query = RunQuery.from_text(", ".join(kept.values()))
    assert query.starts and query.temperature and query.volume and query.code == "K0" and query.table
    assert query.author == "mira" and query.project == "tern" and query.replicate_of == "K01"


@pytest.mark.parametrize(("text", "meaning"), RANGES)
def test_a_range_is_read_as_the_page_says(text: str, meaning: str) -> None:
    line = text if "degC" in text else f"[ester]0 {text}"
    query = RunQuery.from_text(line)
    span = query.temperature if "degC" in text else query.starts[0].range
    assert isinstance(span, Range)
    if "more" in meaning or "less" in meaning:
        assert (span.high is None, span.low is None) == ("more" in meaning, "less" in meaning)
    if ends := re.search(r"so ([\d.]+) to ([\d.]+) ", meaning):
        offset = 273.15 if "degC" in text else 0.0
        assert (span.low, span.high) == pytest.approx([float(end) + offset for end in ends.groups()])
    if text == "50 uM..1 mM":
        assert (span.low, span.high) == pytest.approx((50e-6, 1e-3))


def test_a_bare_word_means_what_the_page_says() -> None:
    assert RunQuery.from_text("K0") == RunQuery.from_text("code K0")


def test_names_in_quotation_marks_are_read_whole() -> None:
    first, second = (one for one in ticked(PAGE.split("\n## Names\n")[1].split("\n## ")[0]))
    assert RunQuery.from_text(first).starts[0].compound == "poly(A), crude"
    assert RunQuery.from_text(second).code == "K 1, again"


@pytest.mark.parametrize(("line", "answer"), REFUSED)
def test_a_line_that_the_page_calls_refused_is_refused_in_these_words(line: str, answer: str) -> None:
    with pytest.raises(InvalidInput) as refused:
        RunQuery.from_text(line)
    (problem,) = refused.value.problems
    assert problem.message == answer and problem.column and problem.field == "filter"


def test_unknown_parameters_and_an_amount_of_nothing_are_refused() -> None:
    with pytest.raises(InvalidInput) as refused:
        RunQuery.from_params({"colour": "blue", "c0_min": "1"})
    assert [problem.field for problem in refused.value.problems] == ["colour", "c0_min"]


def test_the_orders_of_a_list_are_documented() -> None:
    orders = ticked(PAGE.split("\n## Orders and pages\n")[1].split("Lists come")[0])
    assert orders == ["order", *RUN_ORDERS]
