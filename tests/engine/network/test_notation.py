"""Reading mechanisms that are right: what each statement means in the network."""

from __future__ import annotations

import pickle

import pytest

from kinetics_db.engine import parse_mechanism
from kinetics_db.engine.network import computed_in_order, must_be_charged, same_network, write
from kinetics_db.engine.network.expressions import parse_expression, write_expression
from kinetics_db.engine.network.model import Side

CATALYSIS = """\
# a catalytic cycle
Cat + ArX   --k_ox-->        Int            # irreversible elementary step
Int + Nu    <--k_f / k_b-->  Add            # reversible: forward / backward constant
2 Cat       <--k_d / k_u-->  Cat2

nothing     --k_in-->        A
A           --{ k_c*[A]*[Cat]/(1 + K_i*[P]) }-->  P
Cat         --k_dec-->       nothing
hold Nu
observe dimer = [Cat] + 2*[Cat2]
where k_b = k_f / K_1
"""


def test_every_statement_of_a_mechanism_reaches_the_network() -> None:
    network = parse_mechanism(CATALYSIS)
    assert network.species == ("Cat", "ArX", "Int", "Nu", "Add", "Cat2", "A", "P")
    assert network.constants == ("k_ox", "k_f", "k_d", "k_u", "k_in", "k_c", "K_i", "k_dec", "K_1")
    first, second, third, source, law, sink = network.steps
    assert (first.reactants, first.products) == ((("Cat", 1.0), ("ArX", 1.0)), (("Int", 1.0),))
    assert (first.constant, first.reversible, first.line) == ("k_ox", False, 2)
    assert (second.constant, second.reverse_constant) == ("k_f", "k_b")
    assert third.reactants == (("Cat", 2.0),)
    assert source.reactants == ()
    assert law.constant is None
    assert law.law == parse_expression("k_c*[A]*[Cat]/(1 + K_i*[P])")
    assert sink.products == ()
    assert network.held == ("Nu",)
    assert network.observables[0].terms == (("Cat", 1.0), ("Cat2", 2.0))
    assert write_expression(network.computed[0].expression) == "k_f/K_1"
    assert network.text == CATALYSIS
    assert network.warnings == ()


def _side(text: str) -> Side:
    return parse_mechanism(f"{text} --k--> Z").steps[0].reactants


@pytest.mark.parametrize(
    ("text", "side"),
    [
        ("A + A", (("A", 2.0),)),
        ("2 A", (("A", 2.0),)),
        ("A + 2 B + A", (("A", 2.0), ("B", 2.0))),
        ("0.5 O2", (("O2", 0.5),)),
        ("1/2 O2", (("O2", 0.5),)),
        (".5 O2", (("O2", 0.5),)),
        ('2 "Cu(II)L2" + "t-BuOH"', (("Cu(II)L2", 2.0), ("t-BuOH", 1.0))),
        ('2"A b"', (("A b", 2.0),)),
        ("PC* + A' + B.1 + φ₁", (("PC*", 1.0), ("A'", 1.0), ("B.1", 1.0), ("φ₁", 1.0))),
        ('"A"', (("A", 1.0),)),
        ("A\t+\u00a0B", (("A", 1.0), ("B", 1.0))),
        ("nothing", ()),
    ],
)
def test_a_side_is_read_as_species_with_stoichiometric_numbers(text: str, side: Side) -> None:
    assert _side(text) == side


def test_a_catalyst_may_stand_on_both_sides() -> None:
    network = parse_mechanism("A + Cat --k--> B + Cat\nA + B --k_a--> 2 B")
    assert network.steps[1].products == (("B", 2.0),)
    assert network.warnings == ()


@pytest.mark.parametrize("keyword", ["hold", "observe", "where", "keep", "label"])
def test_a_species_may_be_called_like_a_statement(keyword: str) -> None:
    network = parse_mechanism(f"{keyword} + A --k--> B\nhold {keyword}")
    assert network.held == (keyword,)


def test_a_number_sign_inside_quotes_is_no_comment() -> None:
    network = parse_mechanism('"A #1" --k--> B # "a quote in a comment needs no end')
    assert network.species == ("A #1", "B")


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_any_line_ending_is_read(end: str) -> None:
    network = parse_mechanism(f"A --k--> B{end}{end}B --q--> C")
    assert [step.line for step in network.steps] == [1, 3]


def test_a_byte_order_mark_before_the_text_is_no_part_of_it() -> None:
    assert parse_mechanism("\ufeffA --k--> B").species == ("A", "B")


def test_names_typed_with_combining_marks_are_the_same_names() -> None:
    network = parse_mechanism("Ac\u0065\u0301 --k--> B\nobserve x = [Ac\u00e9]")
    assert network.species == ("Ac\u00e9", "B")


@pytest.mark.parametrize(
    ("text", "terms"),
    [
        ("[A]", (("A", 1.0),)),
        ("-[A] + 2*[B]", (("A", -1.0), ("B", 2.0))),
        ("[A]*3 - [B]/4", (("A", 3.0), ("B", -0.25))),
        ("2*([A] + 3*[B])/4", (("A", 0.5), ("B", 1.5))),
        ("[A] + [B] + [A]", (("A", 2.0), ("B", 1.0))),
        ("[A] + [B] - [B]", (("A", 1.0),)),
        ("-2*3*[A]", (("A", -6.0),)),
        ("[A] - -[B]", (("A", 1.0), ("B", 1.0))),
        ("(1 + 2)*[A]", (("A", 3.0),)),
        ("(5 - 1)*[A]", (("A", 4.0),)),
        ("(2*3)*[A]", (("A", 6.0),)),
        ("(3/4)*[A]", (("A", 0.75),)),
        ("[A]*-(1 + 1)", (("A", -2.0),)),
    ],
)
def test_an_observable_is_a_linear_combination(text: str, terms: Side) -> None:
    network = parse_mechanism(f"A --k--> B\nobserve x = {text}")
    assert network.observables[0].terms == terms


def test_an_observable_may_sum_thousands_of_species() -> None:
    steps = "\n".join(f"A{i} --k--> B" for i in range(1500))
    network = parse_mechanism(steps + "\nobserve all = " + " + ".join(f"[A{i}]" for i in range(1500)))
    assert len(network.observables[0].terms) == 1500


def test_computed_constants_may_stand_in_any_order() -> None:
    network = parse_mechanism("where k_1 = 2*k_2\nwhere k_2 = k_3*exp(-E/T)\nA --k_1--> B")
    assert network.constants == ("k_3", "E")
    assert [one.name for one in computed_in_order(network.computed)] == ["k_2", "k_1"]


def test_a_long_chain_of_computed_constants_is_ordered() -> None:
    chain = "".join(f"where k{i} = 2*k{i + 1}\n" for i in range(2000))
    network = parse_mechanism(chain + "A --k0--> B")
    assert network.constants == ("k2000",)
    assert computed_in_order(network.computed)[0].name == "k1999"


def test_species_and_constants_are_ordered_by_the_steps_wherever_other_statements_stand() -> None:
    above = parse_mechanism("where k_2 = k_1/K\nhold B\nA --k_1--> B\nB --k_2--> C")
    below = parse_mechanism("A --k_1--> B\nB --k_2--> C\nhold B\nwhere k_2 = k_1/K")
    assert above.species == below.species == ("A", "B", "C")
    assert above.constants == below.constants == ("k_1", "K")
    assert same_network(above, below)


def test_a_network_travels_between_processes() -> None:
    network = parse_mechanism(CATALYSIS)
    assert pickle.loads(pickle.dumps(network)) == network
    assert hash(network) == hash(parse_mechanism(CATALYSIS))


def test_networks_that_differ_are_not_the_same() -> None:
    network = parse_mechanism("A --k--> B")
    assert not same_network(network, parse_mechanism("A --q--> B"))
    assert not same_network(network, parse_mechanism("A --{ k*[A] }--> B"))


def test_what_no_step_forms_has_to_be_charged() -> None:
    network = parse_mechanism(CATALYSIS)
    assert must_be_charged(network) == ("ArX", "Nu")
    catalyst = parse_mechanism("A + Cat --k--> B + Cat")
    assert must_be_charged(catalyst) == ("A", "Cat")
    autocatalysis = parse_mechanism("A + B --k--> 2 B")
    assert must_be_charged(autocatalysis) == ("A",)


def test_two_thousand_steps_are_accepted() -> None:
    network = parse_mechanism("".join(f"A{i} --k--> A{i + 1}\n" for i in range(2000)))
    assert len(network.steps) == 2000


def test_written_text_is_what_a_chemist_would_type() -> None:
    assert write(parse_mechanism(CATALYSIS)) == (
        "Cat + ArX --k_ox--> Int\n"
        "Int + Nu <--k_f / k_b--> Add\n"
        "2 Cat <--k_d / k_u--> Cat2\n"
        "nothing --k_in--> A\n"
        "A --{ k_c*[A]*[Cat]/(1 + K_i*[P]) }--> P\n"
        "Cat --k_dec--> nothing\n"
        "hold Nu\n"
        "observe dimer = [Cat] + 2*[Cat2]\n"
        "where k_b = k_f/K_1\n"
    )
