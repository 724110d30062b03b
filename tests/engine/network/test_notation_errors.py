"""Every mistake in a mechanism is told with its line, its column and what would mend it."""

from __future__ import annotations

import pytest

from kinetics_db.engine.network import parse_mechanism
from kinetics_db.errors import InvalidInput, Problem


def problems_of(text: str) -> tuple[Problem, ...]:
    with pytest.raises(InvalidInput) as error:
        parse_mechanism(text)
    return error.value.problems


# statement, column, part of the message, part of the cure
ARROWS = [
    ("A --> B", 3, "no constant", "--k-->"),
    ("A ----> B", 3, "no constant", "--k-->"),
    ("A --  --> B", 3, "no constant", "--k-->"),
    ("A --k-> B", 6, "ends in '->'", "-->"),
    ("A -k--> B", 3, "single '-'", "--k-->"),
    ("A <-k_1 / k_2--> B", 3, "single '-'", "<--k_f / k_b-->"),
    ("A --k-- B", 6, "no head", "-->"),
    ("A --k B", 3, "not closed", "--k-->"),
    ("A -> B", 3, "'->' is not an arrow", "--k-->"),
    ("A → B", 3, "'→' is not an arrow", "--k-->"),
    ("A => B", 3, "'=>' is not an arrow", "--k-->"),
    ("A <=> B", 3, "'<=>' is not an arrow", "<--k_f / k_b-->"),
    ("A ⇌ B", 3, "'⇌' is not an arrow", "<--k_f / k_b-->"),
    ("A —k—> B", 3, "'—' is not an arrow", "--k-->"),
    ("A <--> B", 3, "no constants", "<--k_f / k_b-->"),
    ("A <--k--> B", 6, "one constant", "--k--> for an irreversible"),
    ("A <--k_1, k_2--> B", 9, "','", "slash"),
    ("A <--k_1 / --> B", 11, "backward constant is missing", "<--k_f / k_b-->"),
    ("A <--/ k_2--> B", 6, "forward constant is missing", "<--k_f / k_b-->"),
    ("A <--a / b / c--> B", 6, "more than two", "<--k_f / k_b-->"),
    ("A <--k_1 / k_2-- B", 15, "no head", "<--k_f / k_b-->"),
    ("A --k--> B --q--> C", 12, "second arrow", "one step a line"),
    ("A --1.5--> B", 5, "a number, 1.5", "a name"),
    ("A --2*k--> B", 5, "'2*k'", "where"),
    ("A --k 1--> B", 5, "not one name", "k_1"),
    ("A --k'--> B", 5, "k'", "letters, digits and _"),
    ("A --T--> B", 5, "'T' is reserved", "T_1"),
    ("A --exp--> B", 5, "'exp' is reserved", "exp_1"),
    ("A --" + "k" * 101 + "--> B", 5, "101 characters", "100"),
]
SIDES = [
    ("A+B --k--> C", 2, "'+' without a space", "A + B"),
    ("A +B --k--> C", 3, "'+' without a space", "A + B"),
    ("C --k--> A+B", 11, "'+' without a space", "A + B"),
    ("Cu+ + L --k--> C", 3, "right after 'Cu'", '"Cu+"'),
    ("A + --k--> C", 3, "missing after +", "A + B"),
    ("A + + B --k--> C", 5, "'+' has no species before it", "each side"),
    ("+ A --k--> C", 1, "'+' has no species before it", "each side"),
    ("A B --k--> C", 3, "no + before 'B'", "A + B"),
    ("A, B --k--> C", 2, "',' after 'A'", "A + B"),
    ("2A --k--> C", 1, "stand together", "2 A"),
    ("2*A --k--> C", 2, "'*' after the number", "2 A"),
    ("1,5 A --k--> C", 2, "comma", "decimal point"),
    ("0 A --k--> C", 1, "0 as a stoichiometric number", "positive"),
    ("1/0 A --k--> C", 1, "1/0 as a stoichiometric number", "positive"),
    ("9" * 400 + " A --k--> C", 1, "as a stoichiometric number", "positive"),
    ("1000001 A --k--> C", 1, "as a stoichiometric number", "up to 1,000,000"),
    ("2 --k--> C", 3, "missing after the number", "2 A"),
    ("2 nothing --k--> C", 3, "'nothing' stands alone", "without it"),
    ("A + nothing --k--> C", 5, "'nothing' stands alone", "without it"),
    ("nothing + A --k--> C", 1, "'nothing' stands alone", "without it"),
    ("nothing --k--> nothing", 1, "nothing becomes nothing", "a species"),
    ("--k--> C", 1, "no species before the arrow", "nothing"),
    ("A --k-->", 9, "no species after the arrow", "nothing"),
    ("t-BuOH --k--> C", 1, "'t-BuOH' is not a plain", '"t-BuOH"'),
    ("A --k--> Cu(II)L2", 10, "'Cu(II)L2' is not a plain", '"Cu(II)L2"'),
    ("A --k--> ₂B", 10, "'₂B' is not a plain", '"₂B"'),
    ("[A] --k--> C", 1, "brackets", "alone"),
    ("“A” --k--> C", 1, "'“' is not a quote", '"name"'),
    ('A --k--> "B', 10, "quote is not closed", '"'),
    ('"" --k--> B', 1, "empty", "a name"),
    ('" A" --k--> B', 1, "space", '"A"'),
    ('"A\u200b" --k--> B', 1, "cannot be seen", "visible"),
    ("A --k--> T", 10, "'T' is reserved", "another name"),
    ('A --k--> "hv"', 10, "'hv' is reserved", "another name"),
    ("A" * 101 + " --k--> B", 1, "101 characters", "100"),
    ("A\x00 --k--> B", 2, "control character, U+0000", "visible"),
    ("A --k--> B # \ud800", 14, "control character, U+D800", "visible"),
]
LAWS = [
    ("A --{ k*[A] --> B", 5, "not closed", "}"),
    ("A --{ k*[A]", 3, "law over the arrow is not closed", "on one line"),
    ("A --{ k*[A] }-> B", 14, "ends in '->'", "-->"),
    ("A --{ k*[A] }x--> B", 14, "between '}' and the arrow's end", "--{ ... }-->"),
    ("A --k*[A]}--> B", 5, "does not begin with '{'", "--{ ... }-->"),
    ("A --{ }--> B", 7, "missing", "k*[A]"),
    ("A --{ k [A] }--> B", 9, "no operator", "*"),
    ("A --{ k*[A]**2 }--> B", 12, "'**'", "^"),
    ("A --{ ln(k)*[A] }--> B", 7, "'ln'", "log"),
    ("A --{ k*(1 + [A] }--> B", 9, "parenthesis is not closed", ")"),
    ("A <--{ k*[A] }--> B", 6, "over a reversible arrow", "net rate"),
]
STATEMENTS = [
    ("foo", 1, "no statement", "A + B --k--> C"),
    ("Hold A", 1, "'Hold' has to be written in lower case", "hold"),
    ("WHERE k = 2", 1, "'WHERE' has to be written in lower case", "where"),
    ("observ x = [A]", 1, "'observ' is not a statement", "observe"),
    ("k_b = k_f/K_1", 5, "'='", "where k_b ="),
    ("[x] = 2", 5, "'='", "observe"),
    ("hold", 5, "missing", "A, B"),
    ("hold A,", 8, "missing", "A, B"),
    ("hold A B", 8, "'B' between", "comma"),
    ("hold [A]", 6, "brackets", "alone"),
    ("hold t-BuOH", 6, "'t-BuOH'", '"t-BuOH"'),
    ("hold A = 2", 8, "'='", "hold A"),
    ("hold: A", 5, "':'", "hold A"),
    ("observe", 8, "no name", "observe dimer ="),
    ("observe x", 10, "'x' consists of is missing", "observe dimer ="),
    ("observe x =", 12, "missing", "k*[A]"),
    ("observe t-B = [A]", 9, "not a plain name", "quotes"),
    ("observe x = k*[A]", 13, "'k' in an observable", "numbers as weights"),
    ("observe x = [A]*[B]", 13, "not a linear combination", "[Cat] + 2*[Cat2]"),
    ("observe x = 1/[A]", 13, "not a linear combination", "[Cat] + 2*[Cat2]"),
    ("observe x = T*[A]", 13, "not a linear combination", "[Cat] + 2*[Cat2]"),
    ("observe x = [A]/0", 13, "not a linear combination", "[Cat] + 2*[Cat2]"),
    ("observe x = [A]^2", 13, "not a linear combination", "[Cat] + 2*[Cat2]"),
    ("observe x = [A] + 5", 13, "a number by itself", "[Cat] + 2*[Cat2]"),
    ("observe x = [A] - [A]", 13, "no species is left", "[Cat] + 2*[Cat2]"),
    ("observe x = 1e300*(1e300*[A])", 13, "too large", "1e308"),
    ("observe nothing = [A]", 9, "reserved", "another name"),
    ("where", 6, "no '='", "where k_b ="),
    ("where q", 7, "no '='", "where k_b ="),
    ("where = 2", 7, "name of the constant is missing", "where k_b ="),
    ("where q 1 = 2", 7, "'q 1'", "letters, digits and _"),
    ("where T = 2", 7, "'T' is reserved", "T_1"),
    ("where log = 2", 7, "'log' is reserved", "log_1"),
    ("where q := 2", 9, "':='", "="),
    ("where q = 2*[A]", 13, "[A] in a computed constant", "law"),
    ("where q = 2*", 13, "too early", "number"),
]
NOT_YET = [
    ("A + hv --phi--> B", 5, "this version cannot use light-driven steps yet", "written-out law"),
    ("A + hν --phi--> B", 5, "this version cannot use light-driven steps yet", "written-out law"),
    ("keep [C] = K*[A]*[B]", 1, "this version cannot use species held at equilibrium yet", "reversible step"),
    ("label aryl on A, B", 1, "this version cannot use isotopic labels yet", "each isotopologue"),
    ("isotope effect k on aryl = kie", 1, "this version cannot use isotope effects yet", "heavy form"),
    ("where k: eyring(dH, dS)", 8, "this version cannot use eyring(...) and arrhenius(...) yet", "T"),
    ("where k: arrhenius(F, Ea)", 8, "this version cannot use eyring(...) and arrhenius(...) yet", "T"),
    ("A@1 --k--> B", 2, "this version cannot use isotopic labels yet", "each form"),
    ("A --{ k*[A^d] }--> B", 9, "this version cannot use isotopic labels yet", "isotopologue"),
]


@pytest.mark.parametrize(
    ("statement", "column", "message", "cure"), ARROWS + SIDES + LAWS + STATEMENTS + NOT_YET
)
def test_a_mistyped_statement_is_told_with_place_and_cure(
    statement: str, column: int, message: str, cure: str
) -> None:
    (problem,) = problems_of(f"A --k--> B\n# a comment\n{statement}\n")
    assert (problem.line, problem.column) == (3, column), str(problem)
    assert message in problem.message
    assert cure in problem.cure
    assert problem.severity == "error"


# text, line, column, part of the message, part of the cure
WHOLE = [
    ("", 1, 1, "no step", "A --k--> B"),
    ("# only a comment", 1, 1, "no step", "A --k--> B"),
    ("where k = 2", 1, 1, "no step", "A --k--> B"),
    ("Cat --k--> B\nobserve x = [Cta]", 2, 13, "'Cta' stands in no step", "did you mean Cat?"),
    ("Cat --k--> B\nhold cat", 2, 6, "'cat' stands in no step", "did you mean Cat?"),
    ('"Cu(I)" --k--> B\nhold CuI', 2, 6, "'CuI' stands in no step", '"Cu(I)"'),
    ("Xyz --k--> B\nobserve x = [Q]", 2, 13, "'Q' stands in no step", "a species of a step"),
    ("A --{ k*[A]*[Cat] }--> B", 1, 13, "'Cat' stands in no step", "both sides"),
    ("A --k--> B\nobserve B = [A]", 2, 9, "name of a species", "another name"),
    ("A --k--> B\nobserve x = [A]\nobserve x = [B]", 3, 9, "declared on line 2", "one declaration"),
    ("A --k--> B\nwhere k = 2\nwhere k = 3", 3, 7, "computed on line 2", "one `where`"),
    ("A --k--> B\nwhere k = 2*k", 2, 7, "in a circle: k -> k", "given or fitted"),
    ("A --k--> B\nwhere k = q\nwhere q = k", 3, 7, "in a circle", "given or fitted"),
    ("A --k--> B\n2 A --k--> C", 2, 7, "order 2 here and of order 1 on line 1", "each order"),
    ("A <--k / k--> B + C", 1, 10, "order 2 here and of order 1", "each order"),
    ("nothing --k--> A\nA --k--> B", 2, 5, "order 1 here and of order 0", "each order"),
]


@pytest.mark.parametrize(("text", "line", "column", "message", "cure"), WHOLE)
def test_statements_that_do_not_fit_together_are_told_with_place_and_cure(
    text: str, line: int, column: int, message: str, cure: str
) -> None:
    (problem,) = problems_of(text)
    assert (problem.line, problem.column) == (line, column), str(problem)
    assert message in problem.message
    assert cure in problem.cure
    assert problem.severity == "error"


def test_all_problems_are_told_at_once_in_the_order_of_the_text() -> None:
    found = problems_of("A+B --> C\n2A --1--> t-Bu\nC --k--> D\nobserve x = [Dd]\nhold\n")
    assert [(p.line, p.column) for p in found] == [(1, 5), (2, 1), (2, 6), (2, 11), (4, 13), (5, 5)]


def test_an_unknown_species_is_not_blamed_when_the_line_that_names_it_could_not_be_read() -> None:
    (problem,) = problems_of("A --k-> Int\nB --q--> C\nobserve x = [Int]\nobserve y = [A]")
    assert problem.line == 1


def test_a_line_with_an_open_quote_may_name_a_species_too() -> None:
    (problem,) = problems_of('A --k--> "Int\nB --q--> C\nobserve x = [A]')
    assert problem.line == 1


def test_a_species_of_an_unreadable_observable_is_still_unknown_elsewhere() -> None:
    found = problems_of("A --k--> B\nobserve x = k*[Q]\nhold Q")
    assert [p.line for p in found] == [2, 3]


def test_warnings_are_told_beside_errors() -> None:
    found = problems_of("A --k--> A\nB --> C")
    assert [p.severity for p in found] == ["warning", "error"]


def test_more_than_two_thousand_steps_are_refused() -> None:
    (problem,) = problems_of("".join(f"A{i} --k--> A{i + 1}\n" for i in range(2001)))
    assert (problem.line, problem.message, problem.cure) == (
        2001,
        "a mechanism of 2001 steps",
        "at most 2000 steps",
    )


def test_a_text_of_more_than_100_kilobytes_is_refused() -> None:
    (problem,) = problems_of("A --k--> B #" + "é" * 50_000)
    assert problem.message == "a mechanism of 100012 bytes"
    assert "100000" in problem.cure


# text, line, column, part of the message
WARNINGS = [
    ("A --k--> A", 1, 1, "changes nothing"),
    ("A + B --k--> B + A", 1, 1, "changes nothing"),
    ("A --k--> B\nhold A, B", 1, 1, "held species only"),
    ("A --k--> B\n  A --k--> B", 2, 3, "stands on line 1 already"),
    ("A + B --k--> C\nB + A --k--> C", 2, 1, "stands on line 1 already"),
    ("A --k--> B\nhold A\nhold A", 3, 6, "held already on line 2"),
    ("A --k--> B\nwhere K = k/q", 2, 7, "'K' is computed but used in no step"),
    ("A --{ k }--> B", 1, 5, "does not vanish when 'A' has run out, so that"),
    ("A + B --{ k*[A] }--> C", 1, 9, "does not vanish when 'B' has run out"),
    ("A + B --{ k }--> C", 1, 9, "'A' and 'B' have run out"),
    ("A --{ k*(1 + [A]) }--> B", 1, 5, "does not vanish when 'A'"),
    ("A --{ k_f*[A] - k_b }--> B", 1, 5, "does not vanish when 'B' has run out, so"),
    ("A --{ k*[A]*log([A]) }--> B", 1, 5, "does not vanish when 'A' has run out: it has no value there"),
    ("A --{ k/[A] }--> B", 1, 5, "it has no value there"),
    ("A --{ k*A }--> B", 1, 9, "'A' without brackets"),
]


@pytest.mark.parametrize(("text", "line", "column", "message"), WARNINGS)
def test_what_is_odd_but_possible_is_warned_about(text: str, line: int, column: int, message: str) -> None:
    found = [p for p in parse_mechanism(text).warnings if message in p.message]
    assert [(p.line, p.column, p.severity) for p in found] == [(line, column, "warning")]
    assert all(p.cure for p in found)


@pytest.mark.parametrize(
    "text",
    [
        "A --{ k*[A]/(K + [A]) }--> B",
        "A --{ k*[A]^n }--> B",
        "A --{ k_f*[A] - k_b*[B] }--> B",
        "A + Cat --{ k*[A]*[Cat]^0.5 }--> B + Cat",
        "A + Cat --{ k*[A] }--> B + Cat",
        "A --{ k*sqrt([A]) }--> B",
        "A --{ k*(exp([A]) - 1) }--> B",
        "nothing --{ k }--> B",
        "A --{ k }--> B\nhold A",
        "A --{ (k_1 - k_2)*(1 + [A]) + k*[A] }--> B\nwhere k_1 = 1*k_2",
        "1000000 A --{ 1e308*k*[A] }--> B",
        "A --{ k*exp(-Ea/(8.314*T))*[A] }--> B",
        "A --k--> B\nB --k--> C",
        "A --{ k*[A]*a }--> B",
    ],
)
def test_what_is_right_is_not_warned_about(text: str) -> None:
    assert parse_mechanism(text).warnings == ()


def test_a_message_quotes_only_the_ends_of_a_very_long_mistake() -> None:
    (problem,) = problems_of("A --" + "k " * 20_000 + "x--> B")
    assert len(problem.message) < 500
    assert problem.message.endswith("is not one name")
    assert len(problem.cure) < 500
