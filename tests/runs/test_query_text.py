"""Queries for runs as a line of text and as parameters."""

from __future__ import annotations

from datetime import date
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.errors import InvalidInput
from kinetics_db.runs.entry import CONTROL_KINDS
from kinetics_db.runs.query import Range, RunQuery, StartRange
from kinetics_db.runs.query_params import PARAMETERS

WHOLE = "[ArX]0 50..150 mM, 40 degC, after 2026-03-01, by mira, control blank, K0"


def refusals(text: Any) -> list[tuple[int | None, str, str]]:
    with pytest.raises(InvalidInput) as caught:
        RunQuery.from_text(text)
    assert {problem.field for problem in caught.value.problems} == {"filter"}
    assert all(problem.cure for problem in caught.value.problems)
    return [(problem.column, problem.message, problem.cure) for problem in caught.value.problems]


def test_a_line_is_read_part_by_part() -> None:
    query = RunQuery.from_text(WHOLE)
    assert query == RunQuery(
        starts=(StartRange("ArX", Range(0.05, 0.15)),),
        temperature=Range(312.65, 313.65),
        after=date(2026, 3, 1),
        author="mira",
        control="blank",
        code="K0",
    )
    assert (
        query.to_text() == "[ArX]0 50..150 mM, T 40 degC, after 2026-03-01, by mira, control blank, code K0"
    )


def test_nothing_finds_everything() -> None:
    for empty in ("", "   ", " , ,"):
        query = RunQuery.from_text(empty)
        assert (query, bool(query), query.to_text()) == (RunQuery(), False, "")


@pytest.mark.parametrize(
    ("text", "low", "high"),
    [
        ("[A]0 50..150 mM", 0.05, 0.15),
        ("[A] 50..150 mM", 0.05, 0.15),
        ("[A]₀ .5..1.5e2 mM", 0.0005, 0.15),
        ("[A]0 500 uM..1 mM", 0.0005, 0.001),
        ("[A]0 50.. mM", 0.05, None),
        ("[A]0 50 mM..", 0.05, None),
        ("[A]0 ..150 mM", None, 0.15),
        ("[A]0 >= 50 mM", 0.05, None),
        ("[A]0>=50 mM", 0.05, None),
        ("[A]0 ≤ 150 mM", None, 0.15),
        ("[A]0 50 mM", 0.0495, 0.0505),  # half of the last digit typed
        ("[A]0 50.0 mM", 0.04995, 0.05005),
        ("[A]0 0.1 mol/L", 0.095, 0.105),  # never more than 5 %
        ("[A]0 1e-3 mol/L", 0.00095, 0.00105),
        ("[A]0 0 mM", 0.0, 0.0),
    ],
)
def test_a_range_of_a_start_concentration(text: str, low: float | None, high: float | None) -> None:
    (start,) = RunQuery.from_text(text).starts
    assert start.range is not None and not start.relative
    assert (start.range.low, start.range.high) == (pytest.approx(low), pytest.approx(high))


def test_a_compound_alone_means_any_amount_of_it() -> None:
    assert RunQuery.from_text("[A]0, [B]").starts == (StartRange("A"), StartRange("B"))


def test_percent_is_looked_for_among_runs_in_percent() -> None:
    assert RunQuery.from_text("[A]0 90..100 %").starts == (
        StartRange("A", Range(90.0, 100.0), relative=True),
    )


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("[1,3-diene]0", "1,3-diene"),
        ("[[Ru(bpy)3]2+]0", "[Ru(bpy)3]2+"),
        ('["a]b"]0 5 mM', "a]b"),
        ('["say ""so"""]0', 'say "so"'),
        ("[ amine A ]0", "amine A"),
        ("[Å]", "Å"),
    ],
)
def test_names_of_compounds_may_hold_commas_brackets_and_quotation_marks(text: str, name: str) -> None:
    query = RunQuery.from_text(text)
    assert [start.compound for start in query.starts] == [name]
    assert RunQuery.from_text(query.to_text()) == query


@pytest.mark.parametrize(
    ("text", "kind", "low", "high"),
    [
        ("40 degC", "temperature", 312.65, 313.65),
        ("T 300..310 K", "temperature", 300.0, 310.0),
        ("temperature >= 30 degC", "temperature", 303.15, None),
        ("T>=300 K", "temperature", 300.0, None),
        ("-10..0 degC", "temperature", 263.15, 273.15),
        ("10 mL", "volume", 0.0095, 0.0105),
        ("V ..20 mL", "volume", None, 0.02),
    ],
)
def test_temperature_and_volume(text: str, kind: str, low: float | None, high: float | None) -> None:
    found = getattr(RunQuery.from_text(text), kind)
    assert (found.low, found.high) == (pytest.approx(low), pytest.approx(high))


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("before 2026-04-01", RunQuery(before=date(2026, 4, 1))),
        ("no control", RunQuery(control="")),
        ("control none", RunQuery(control="")),
        ("control", RunQuery(control="any")),
        ("control without light", RunQuery(control="without light")),
        ("replicate of K 01", RunQuery(replicate_of="K 01")),
        ("has table", RunQuery(table=True)),
        ("no table", RunQuery(table=False)),
        ("project tern", RunQuery(project="tern")),
        ("code after", RunQuery(code="after")),
        ('code "a, b"', RunQuery(code="a, b")),
        ("17", RunQuery(code="17")),
        ("5-B", RunQuery(code="5-B")),
        ("BY mira", RunQuery(author="mira")),
    ],
)
def test_words(text: str, expected: RunQuery) -> None:
    assert RunQuery.from_text(text) == expected
    assert RunQuery.from_text(expected.to_text()) == expected


@pytest.mark.parametrize(
    ("text", "column", "message", "cure"),
    [
        ("K0, foo bar", 5, "'foo bar' is not understood", "has table"),
        ("[A]0 50 xM", 1, "unknown unit 'xM'", "did you mean M"),
        ("[A]0 5 h", 1, "a time is no concentration", "50..150 mM"),
        ("[A]0 50", 1, "the unit is missing", "50..150 mM"),
        ("[A]0 1,5 mM", 7, "has a comma between digits", "a decimal point"),
        ("[A]0 50-150 mM", 1, "is no number with a unit", "50..150 mM"),
        ("[A]0 50...150 mM", 1, "is no number with a unit", "50..150 mM"),
        ("[A]0 .. mM", 1, "at least one end", "50..150 mM"),
        ("[A]0 > 5 mM", 1, "ends belong to a range", ">="),
        ("[A]0 9..3 mM", 1, "ends before it begins", "smaller number first"),
        ("[A]0 1 s..3 mM", 1, "measure different things", "50..150 mM"),
        ("[A]0 1e999 M", 1, "too large for a number", "50..150 mM"),
        ("[]0 3 mM", 1, "compound is empty", "1 to"),
        ("K0,   [A", 7, "a bracket is not closed", "[compound]0"),
        ('code "a', 6, "a quotation mark is not closed", "[compound]0"),
        ("50 mM", 1, "a concentration of what?", "[ArX]0 50 mM"),
        ("T 40 C", 1, "is not a temperature", "40 degC"),
        ("T 5 mL", 1, "is not a temperature", "40 degC"),
        ("5 h", 1, "is not a temperature or volume", "40 degC"),
        ("40 degC, 50 degC", 10, "the temperature stands twice", "a range"),
        ("after 2026-3-1", 1, "'2026-3-1' is no day", "2026-03-01"),
        ("after 2026-02-30", 1, "is no day", "2026-03-01"),
        ("before", 1, "is no day", "2026-03-01"),
        ("by ", 1, "name is empty", "1 to"),
        ("control sham", 1, "is no kind of control", "blank"),
        ("has nothing", 1, "is not understood", "has table"),
        ("455 nm", 1, "wavelengths of lamps are not recorded yet", "leave it out"),
        ("wavelength 455 nm", 1, "wavelengths of lamps are not recorded yet", "leave it out"),
        ("code a\0b", 1, "cannot be stored", "visible characters"),
    ],
)
def test_a_part_that_cannot_be_read_is_told_with_its_place(
    text: str, column: int, message: str, cure: str
) -> None:
    told = refusals(text)
    assert any(c == column and message in m and cure in h for c, m, h in told), told


def test_every_part_that_cannot_be_read_is_told_at_once() -> None:
    told = refusals("control blnk, 40 degC, after today, foo bar")
    assert [column for column, *_ in told] == [1, 24, 37]


@pytest.mark.parametrize("text", ["x" * 1001, None, 5])
def test_what_is_no_line_is_refused(text: Any) -> None:
    assert "filter" in refusals(text)[0][1]


NAMES = st.text(st.characters(exclude_categories=("Cc", "Cs")), min_size=1, max_size=30)
ENDS = st.floats(0, 1e6) | st.none()


def is_stored_name(name: str) -> bool:
    import unicodedata

    return name == unicodedata.normalize("NFC", name).strip() and bool(name)


@st.composite
def ranges(draw: st.DrawFn) -> Range:
    low, high = draw(ENDS), draw(ENDS)
    if low is None and high is None:
        low = 1.0
    return Range(min(low, high), max(low, high)) if low is not None and high is not None else Range(low, high)


@given(
    st.builds(
        RunQuery,
        starts=st.lists(
            st.builds(StartRange, NAMES.filter(is_stored_name), ranges() | st.none(), st.just(False)),
            max_size=3,
        ).map(tuple),
        temperature=ranges() | st.none(),
        volume=ranges() | st.none(),
        after=st.dates() | st.none(),
        before=st.dates() | st.none(),
        code=NAMES.filter(is_stored_name) | st.just(""),
        author=NAMES.filter(is_stored_name) | st.just(""),
        control=st.sampled_from([None, "", "any", *(kind for kind in CONTROL_KINDS if kind)]),
        replicate_of=NAMES.filter(is_stored_name) | st.just(""),
        table=st.sampled_from([None, True, False]),
        project=st.sampled_from(["", "tern", "a-b-2"]),
    )
)
def test_every_query_comes_back_from_its_own_line(query: RunQuery) -> None:
    assert RunQuery.from_text(query.to_text()) == query


@given(st.text(max_size=80) | st.text('[]"0.,<>=≥ mMTVKdegC51-', max_size=40))
def test_no_line_ends_in_anything_but_a_query_or_a_refusal(text: str) -> None:
    try:
        query = RunQuery.from_text(text)
    except InvalidInput as error:
        assert {problem.field for problem in error.problems} == {"filter"}
    else:
        assert RunQuery.from_text(query.to_text()) == query


def test_parameters_say_the_same_as_a_line() -> None:
    found = RunQuery.from_params(
        {
            "compound": "ArX", "c0_min": "50", "c0_max": 150, "c0_unit": "mM", "T_min": "40 degC", "T_max": "320",
            "volume_min": "5 mL", "after": "2026-03-01", "before": "", "author": "mira", "control": "none",
            "has": "no table", "code": "K0", "project": "tern", "replicate_of": "K01", "cursor": "x",
        },
        ignore=["cursor"],
    )  # fmt: skip
    assert found == RunQuery.from_text(
        "[ArX]0 50..150 mM, T 313.15..320 K, V >= 5 mL, after 2026-03-01, by mira, no control, no table, "
        "code K0, project tern, replicate of K01"
    )


def test_percent_in_parameters() -> None:
    found = RunQuery.from_params({"compound": "A", "c0_min": 95, "c0_unit": "%"})
    assert found.starts == (StartRange("A", Range(95.0, None), relative=True),)


@pytest.mark.parametrize(
    ("params", "field", "message"),
    [
        ({"colour": "red"}, "colour", "unknown parameter"),
        ({"x" * 500: "red"}, "x" * 80, "unknown parameter"),
        ({"wavelength": "455"}, "wavelength", "not recorded yet"),
        ({"c0_min": "1"}, "c0_min", "a start concentration of what?"),
        ({"compound": "A", "c0_unit": "mg"}, "c0_unit", "no unit of concentration"),
        ({"compound": "A", "c0_min": "2", "c0_max": "1"}, "c0_max", "below c0_min"),
        ({"compound": "A", "c0_min": "1 h"}, "c0_min", "no unit of concentration"),
        ({"compound": "A" * 201}, "compound", "too many"),
        ({"compound": ["A"]}, "compound", "list in place of text"),
        ({"T_min": "hot"}, "T_min", "no number"),
        ({"T_min": "1e999"}, "T_min", "too large"),
        ({"T_max": "5 mL"}, "T_max", "no unit of temperature"),
        ({"volume_min": "1,5"}, "volume_min", "decimal"),
        ({"after": "1 March"}, "after", "is no day"),
        ({"control": "sham"}, "control", "no kind of control"),
        ({"has": "file"}, "has", "not understood"),
        ({"code": "a\0"}, "code", "cannot be stored"),
    ],
)
def test_a_parameter_that_cannot_be_read_is_named(params: dict[str, Any], field: str, message: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        RunQuery.from_params(params)
    assert [(p.field, message in p.message) for p in caught.value.problems] == [(field, True)]


def test_every_parameter_is_read() -> None:
    examples = {
        "compound": "A", "c0_min": "1", "c0_max": "2", "c0_unit": "mM", "T_min": "1", "T_max": "2",
        "volume_min": "1", "volume_max": "2", "after": "2026-01-01", "before": "2026-01-02", "has": "table",
        "control": "any",
    }  # fmt: skip
    everything = {name: examples.get(name, "x") for name in PARAMETERS}
    whole = RunQuery.from_params(everything)
    for name in set(everything) - {"compound", "c0_unit"}:
        assert RunQuery.from_params({k: v for k, v in everything.items() if k != name}) != whole, name
