"""Numbers as people type them."""

from __future__ import annotations

import pytest

from kinetics_db.errors import InvalidInput
from kinetics_db.web.typed import Numbers, number_or_none, number_text, number_typed


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("12.3", 12.3),
        (" 5 ", 5.0),
        ("-1", -1.0),
        ("\N{MINUS SIGN}1.5", -1.5),
        ("4.5e-3", 0.0045),
        (".5", 0.5),
        ("0e9", 0.0),
    ],
)
def test_a_number_is_read_as_it_is_written(text: str, value: float) -> None:
    assert number_typed(text, field="x") == value


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "missing"),
        ("1,5", "write 1.5"),
        ("1 000", "is no number"),
        ("1.2.3", "is no number"),
        ("nan", "is no number"),
        ("inf", "is no number"),
        ("1_0", "is no number"),
        ("٣", "is no number"),
        ("1e400", "too large"),
        ("1e-400", "too small"),
        ("9" * 1_000_000, "is no number"),
        ("12.3 mg", "is no number"),
    ],
)
def test_anything_else_is_refused_with_its_field(text: str, says: str) -> None:
    with pytest.raises(InvalidInput) as refused:
        number_typed(text, field="amount")
    (problem,) = refused.value.problems
    assert says in str(problem)
    assert problem.field == "amount"
    assert len(str(problem)) < 200


@pytest.mark.parametrize("value", [0.1, 10.0, -3.0, 1e300, 5e-324, 123456789.123])
def test_a_number_that_is_shown_reads_back_as_itself(value: float) -> None:
    assert number_typed(number_text(value), field="x") == value


def test_nothing_typed_is_nothing() -> None:
    assert number_or_none("  ", field="x") is None
    assert number_text(None) == ""


def test_all_problems_of_a_form_are_told_at_once() -> None:
    numbers = Numbers()
    assert numbers.read("x", field="one") is None
    assert numbers.read("2", field="two") == 2.0
    numbers.wrong("a unit is missing", field="three", cure="mL")
    with pytest.raises(InvalidInput) as refused:
        numbers.done()
    assert [problem.field for problem in refused.value.problems] == ["one", "three"]
