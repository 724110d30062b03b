"""Expressions: grammar, evaluation, exact derivatives and writing."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kinetics_db.engine.canonical import canonical_json
from kinetics_db.engine.network.expressions import (
    Binary,
    Call,
    Concentration,
    Expression,
    Negation,
    Number,
    Parameter,
    Temperature,
    derivative,
    evaluate,
    parameters_of,
    parse_expression,
    species_of,
    to_plain,
    uses_temperature,
    write_expression,
)
from kinetics_db.errors import InvalidInput

a, b, c = Parameter("a"), Parameter("b"), Parameter("c")
VALUES = {"a": 3.0, "b": 2.0, "c": 0.5}


@pytest.mark.parametrize(
    ("text", "tree"),
    [
        ("a - b - c", Binary("-", Binary("-", a, b), c)),
        ("a/b*c", Binary("*", Binary("/", a, b), c)),
        ("a + b*c", Binary("+", a, Binary("*", b, c))),
        ("a^b^c", Binary("^", a, Binary("^", b, c))),
        ("-a^b", Negation(Binary("^", a, b))),
        ("(-a)^b", Binary("^", Negation(a), b)),
        ("a^-b", Binary("^", a, Negation(b))),
        ("-a*b", Binary("*", Negation(a), b)),
        ("a - -b", Binary("-", a, Negation(b))),
        ("k_c*[A*']", Binary("*", Parameter("k_c"), Concentration("A*'"))),
        ('["Cu(II) ]"]', Concentration("Cu(II) ]")),
        ("[ A ]", Concentration("A")),
        ("exp(-a/T)", Call("exp", Binary("/", Negation(a), Temperature()))),
        ("1.5e-3", Number(0.0015)),
        (".5 + 2.", Binary("+", Number(0.5), Number(2.0))),
        ("φ*k₁", Binary("*", Parameter("φ"), Parameter("k₁"))),
    ],
)
def test_text_is_read_with_the_precedence_of_mathematics(text: str, tree: Expression) -> None:
    assert parse_expression(text) == tree


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("-a^2", -9.0),
        ("2^-1", 0.5),
        ("2^3^2", 512.0),
        ("a/b/c", 3.0),
        ("a - (b - c)", 1.5),
        ("sqrt(a + 1)*log(exp(b))", 4.0),
        ("-2^2 + 10", 6.0),
    ],
)
def test_values_follow_the_precedence(text: str, value: float) -> None:
    assert evaluate(parse_expression(text), parameters=VALUES) == pytest.approx(value, rel=1e-15)


def test_concentrations_and_temperature_enter_the_value() -> None:
    law = parse_expression("k*exp(-Ea/(8.314462618*T))*[A]^2")
    value = evaluate(law, parameters={"k": 2.0, "Ea": 5000.0}, concentrations={"A": 0.3}, temperature=300.0)
    assert value == pytest.approx(2.0 * math.exp(-5000.0 / (8.314462618 * 300.0)) * 0.09, rel=1e-14)


def test_arrays_are_evaluated_element_by_element() -> None:
    amounts = np.array([0.0, 1.0, 2.0])
    value = evaluate(parse_expression("a*[A]/(b + [A])"), parameters=VALUES, concentrations={"A": amounts})
    np.testing.assert_allclose(value, 3.0 * amounts / (2.0 + amounts), rtol=1e-15)


@pytest.mark.parametrize(
    "text", ["1/(a - a)", "log(a - a)", "log(-a)", "sqrt(-a)", "exp(1000*a)", "(-a)^0.5"]
)
def test_what_has_no_finite_value_gives_no_exception(text: str) -> None:
    assert not np.isfinite(evaluate(parse_expression(text), parameters=VALUES))


@pytest.mark.parametrize(("text", "field"), [("a + z", "z"), ("[X]", "X"), ("T*a", "T")])
def test_a_missing_value_is_named(text: str, field: str) -> None:
    with pytest.raises(InvalidInput) as error:
        evaluate(parse_expression(text), parameters=VALUES)
    assert error.value.problems[0].field == field


def test_names_are_listed_once_in_order_of_appearance() -> None:
    law = parse_expression("b*[Q]*a*[P]/(1 + b*[P])")
    assert parameters_of(law) == ("b", "a")
    assert species_of(law) == ("Q", "P")
    assert not uses_temperature(law)
    assert uses_temperature(parse_expression("a*log(T)"))


def test_names_typed_with_combining_marks_are_the_same_names() -> None:
    assert parse_expression("[Ac\u0065\u0301]*k\u0065\u0301") == parse_expression("[Ac\u00e9]*k\u00e9")


@pytest.mark.parametrize(
    ("text", "column", "message", "cure"),
    [
        ("", 1, "missing", "k*[A]"),
        ("k [A]", 3, "no operator before '[A]'", "*"),
        ("2k", 2, "no operator before 'k'", "*"),
        ("k**2", 2, "'**'", "^"),
        ("k*", 3, "too early", "parameter"),
        ("k*/2", 3, "'/' stands where", "number"),
        ("+k", 1, "nothing before it", "without"),
        ("(k", 1, "not closed", ")"),
        ("k)", 2, "not opened", "("),
        ("(k q)", 4, "no operator before 'q'", "*"),
        ('["A]*k', 2, "quote is not closed", '"'),
        ("k]", 2, "not opened", "["),
        ("[A", 1, "not closed", "]"),
        ("[]", 1, "no species", "[A]"),
        ("[Cu(II)]", 2, "not a plain species name", '["Cu(II)"]'),
        ("[P^aryl]", 1, "labels", "isotopologue"),
        ("[T]", 2, "reserved", "another name"),
        ('"A"*k', 1, "without brackets", '["name"]'),
        ("0,5*k", 2, "comma", "0.5"),
        ("k·[A]", 2, "'·'", "*"),
        ("k−1", 2, "'−'", "-"),
        ("[A]²", 4, "'²'", "^2"),
        ("{k}", 1, "'{'", "( and )"),
        ("k = 2", 3, "'='", "one expression"),
        ("k ; 2", 3, "';'", "+ - * / ^"),
        ("ln(k)", 1, "'ln'", "log(...)"),
        ("log10(k)", 1, "'log10'", "log(x)/log(10)"),
        ("sqr(k)", 1, "'sqr'", "sqrt"),
        ("k(2)", 1, "'k'", "k*(...)"),
        ("exp + 1", 1, "no argument", "exp(...)"),
        ("exp()", 5, "')' stands", "number"),
        ("hv*k", 1, "reserved", "parameter"),
        ("1e999", 1, "too large", "1.7e308"),
        ("k" * 101, 1, "101 characters", "100"),
    ],
)
def test_what_cannot_be_read_is_told_with_place_and_cure(
    text: str, column: int, message: str, cure: str
) -> None:
    with pytest.raises(InvalidInput) as error:
        parse_expression(text, line=7, column=11)
    (problem,) = error.value.problems
    assert (problem.line, problem.column) == (7, 10 + column)
    assert message in problem.message
    assert cure in problem.cure


@pytest.mark.parametrize(
    "text",
    [
        "(" * 10_000 + "k" + ")" * 10_000,
        "-" * 10_000 + "k",
        "2^" * 10_000 + "k",
        "k" + "+k" * 10_000,
        "k" + "/k" * 10_000,
        "exp(" * 10_000,
        "(" * 100_000,
    ],
)
def test_deeply_nested_text_is_refused_and_does_not_exhaust_the_stack(text: str) -> None:
    with pytest.raises(InvalidInput, match="operations stand inside"):
        parse_expression(text)


def test_the_deepest_accepted_expression_can_be_differentiated_twice_and_evaluated() -> None:
    text = "/(1 + ".join(["[A]"] * 39) + ")" * 38
    law = parse_expression(text)
    second = derivative(derivative(law, Concentration("A")), Concentration("A"))
    assert np.isfinite(evaluate(second, concentrations={"A": 1.0}))
    long = parse_expression("*".join(["[A]"] * 100))
    slope = derivative(derivative(long, Concentration("A")), Concentration("A"))
    assert evaluate(slope, concentrations={"A": 1.0}) == pytest.approx(9900.0, rel=1e-12)


# Generated trees

leaves = st.one_of(
    st.floats(0.0, 1e12, allow_nan=False).map(lambda value: Number(value + 0.0)),
    st.sampled_from(["a", "b", "k_1", "φ"]).map(Parameter),
    st.sampled_from(["A", "B*", "Cu(II)", "x y"]).map(Concentration),
    st.just(Temperature()),
)
trees: st.SearchStrategy[Expression] = st.recursive(
    leaves,
    lambda inner: st.one_of(
        inner.map(Negation),
        st.builds(Binary, st.sampled_from(["+", "-", "*", "/", "^"]), inner, inner),
        st.builds(Call, st.sampled_from(["exp", "log", "sqrt"]), inner),
    ),
    max_leaves=25,
)


@given(trees)
def test_a_written_expression_parses_to_the_same_tree(tree: Expression) -> None:
    assert parse_expression(write_expression(tree)) == tree


@given(trees)
def test_no_pair_of_parentheses_in_a_written_expression_can_be_left_out(tree: Expression) -> None:
    text = write_expression(tree)
    for at, character in enumerate(text):
        if character != "(" or (at and text[at - 1].isalpha()) or '"' in text:
            continue
        depth, close = 0, at
        while True:
            depth += {"(": 1, ")": -1}.get(text[close], 0)
            if depth == 0:
                break
            close += 1
        without = text[:at] + text[at + 1 : close] + text[close + 1 :]
        try:
            assert parse_expression(without) != tree, f"{text} needs no parentheses at {at}"
        except InvalidInput:
            continue


@given(trees)
def test_equal_trees_and_only_those_have_equal_plain_forms(tree: Expression) -> None:
    assert canonical_json(to_plain(tree)) == canonical_json(
        to_plain(parse_expression(write_expression(tree)))
    )
    assert canonical_json(to_plain(tree)) != canonical_json(to_plain(Negation(tree)))


# For complex steps every operation has to be analytic at the point, so arguments are kept positive.
positive: st.SearchStrategy[Expression] = st.recursive(
    st.one_of(
        st.floats(0.25, 4.0).map(Number),
        st.sampled_from(["p", "q"]).map(Parameter),
        st.sampled_from(["X", "Y"]).map(Concentration),
        st.just(Binary("/", Temperature(), Number(300.0))),
    ),
    lambda inner: st.one_of(
        st.builds(Binary, st.sampled_from(["+", "*", "/"]), inner, inner),
        st.builds(lambda base, power: Binary("^", base, Binary("/", power, Number(3.0))), inner, inner),
        st.builds(
            lambda x, y: Binary("+", Number(1.0), Negation(Binary("/", x, Binary("+", x, y)))), inner, inner
        ),
        inner.map(lambda x: Call("sqrt", x)),
        inner.map(lambda x: Call("exp", Negation(x))),
        inner.map(lambda x: Call("log", Binary("+", Number(1.0), x))),
    ),
    max_leaves=8,
)
variables = st.sampled_from(
    [Parameter("p"), Parameter("q"), Concentration("X"), Concentration("Y"), Temperature()]
)


@settings(max_examples=300)
@given(positive, variables, st.lists(st.floats(0.5, 2.0), min_size=4, max_size=4))
def test_derivatives_agree_with_the_complex_step(tree: Expression, variable: object, at: list[float]) -> None:
    """Complex step: Im f(x + ih)/h, free of cancellation (Squire and Trapp, SIAM Review 40 (1998) 110)."""
    step = 1e-150
    parameters: dict[str, float | complex] = {"p": at[0], "q": at[1]}
    concentrations: dict[str, float | complex] = {"X": at[2], "Y": at[3]}
    temperature: float | complex = 310.0
    exact = evaluate(
        derivative(tree, variable),  # type: ignore[arg-type]
        parameters=parameters,
        concentrations=concentrations,
        temperature=temperature,
    )
    match variable:
        case Parameter(name):
            parameters[name] += 1j * step
        case Concentration(species):
            concentrations[species] += 1j * step
        case _:
            temperature += 1j * step
    moved = evaluate(tree, parameters=parameters, concentrations=concentrations, temperature=temperature)
    if not (np.isfinite(moved) and abs(moved) < 1e100):
        return
    assert exact == pytest.approx(np.imag(moved) / step, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize(
    ("text", "written"),
    [
        ("k*[A]", "k"),
        ("k*[A]^2", "k*(2*[A])"),
        ("k*[B]", "0"),
        ("k*[A]/(1 + K*[B])", "k/(1 + K*[B])"),
        ("k*[B] - [A]", "-1"),
        ("exp([A])", "exp([A])"),
        ("log([A])", "1/[A]"),
    ],
)
def test_derivatives_are_simplified(text: str, written: str) -> None:
    assert write_expression(derivative(parse_expression(text), Concentration("A"))) == written


def test_the_derivative_by_an_order_is_zero_where_the_species_is_absent() -> None:
    slope = derivative(parse_expression("k*[A]^n"), Parameter("n"))
    assert evaluate(slope, parameters={"k": 2.0, "n": 0.5}, concentrations={"A": 0.0}) == 0.0
    value = evaluate(slope, parameters={"k": 2.0, "n": 0.5}, concentrations={"A": 0.25})
    assert value == pytest.approx(2.0 * 0.5 * math.log(0.25), rel=1e-14)


@pytest.mark.parametrize(
    ("text", "written"),
    [
        ("-[A]", "-1"),
        ("-k*[A]", "-k"),
        ("k - -[A]", "1"),
        ("[A] - -k*[A]", "1 + k"),
        ("3*(2*[A])", "6"),
        ("[A]/1", "1"),
        ("[A]/4", "0.25"),
        ("-[A]/k", "-1/k"),
        ("k*-[A]", "-k"),
        ("[A]^1", "1"),
        ("[A]^-1", "-[A]^-2"),
        ("k/[A]", "-(k/[A]^2)"),
        ("sqrt([A])", "0.5/sqrt([A])"),
        ("exp(-k*[A])", "-(exp(-k*[A])*k)"),
        ("-exp(-[A])", "exp(-[A])"),
        ("[A]/0", "1/0"),
        ("1e300*(1e300*[A])", "1e+300*1e+300"),
    ],
)
def test_signs_and_numbers_are_folded_in_derivatives(text: str, written: str) -> None:
    assert write_expression(derivative(parse_expression(text), Concentration("A"))) == written


def test_the_inner_function_of_a_derivative_by_an_exponent_cannot_be_written() -> None:
    with pytest.raises(InvalidInput, match="log or zero"):
        write_expression(derivative(parse_expression("a^b"), b))
