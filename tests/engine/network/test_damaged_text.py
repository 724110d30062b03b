"""However a text is damaged, it is read or refused with places: nothing else is ever raised."""

from __future__ import annotations

import random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kinetics_db.engine.network import mechanism_digest, parse_mechanism, same_network, write
from kinetics_db.errors import InvalidInput

VALID = """\
# hydrolysis beside coupling
Cat + ArX   --k_ox-->        Int            # irreversible
Int + Nu    <--k_f / k_b-->  Add
2 Cat       <--k_d / k_u-->  "Cat(2)"
nothing     --k_in-->        A
0.5 A + φ*  --{ k_c*[A]*[Cat]^-n/(1 + K_i*["Cat(2)"] - exp(-E/(8.314*T))) }-->  P
Cat         --k_dec-->       nothing
hold Nu, "Cat(2)"
observe dimer = [Cat] + 2*["Cat(2)"] - 1e-3*([A] - [P])/4
where k_b = k_f / K_1
where k_u = sqrt(k_d)*log(2 + T)
"""
PIECES = [
    *"-<>{}[]()\"'#+*/^=:;,.@_ \t\n\r0123456789TAkhvé²−–→\x00\x0b\u2028\u200b\ufeff\ud800\U0001f9ea\u0301",
    "-->", "<--", "--{", "}-->", " / ", "hv", "nothing", "hold ", "observe ", "where ", "keep ",
    "label x on A", "1e999", "exp(", "log", "((((", "----", "**", "where a = b\n", "9" * 400,
]  # fmt: skip


def damaged(draw: random.Random) -> str:
    """The valid text with one to four pieces removed, doubled, moved or put in."""
    text = VALID
    for _ in range(draw.randint(1, 4)):
        at = draw.randrange(len(text) + 1)
        end = min(len(text), at + draw.choice([1, 1, 1, 2, 5, 40]))
        other = draw.randrange(len(text) + 1)
        text = draw.choice(
            [
                text[:at] + text[end:],
                text[:at] + text[at:end] + text[at:],
                text[:at] + draw.choice(PIECES) + text[at:],
                text[:at] + draw.choice(PIECES) + text[end:],
                text[:other] + text[at:end] + text[other:],
            ]
        )
    return text


def read_or_refuse(text: str) -> bool:
    """Whether the text was read; checks what has to hold either way."""
    try:
        network = parse_mechanism(text)
    except InvalidInput as error:
        assert any(problem.severity == "error" for problem in error.problems)
        lines = text.removeprefix("\ufeff").replace("\r\n", "\n").replace("\r", "\n").split("\n")
        for problem in error.problems:
            assert problem.message
            assert problem.cure
            assert problem.line is not None and 1 <= problem.line <= len(lines)
            assert problem.column is not None and 1 <= problem.column <= len(lines[problem.line - 1]) + 1, (
                problem
            )
        return False
    assert same_network(parse_mechanism(write(network)), network)
    assert len(mechanism_digest(network)) == 64
    return True


def test_the_undamaged_text_is_read() -> None:
    assert read_or_refuse(VALID)


@pytest.mark.parametrize("seed", range(4))
def test_a_thousand_damaged_texts_are_read_or_refused_with_places(seed: int) -> None:
    draw = random.Random(seed)
    read = sum(read_or_refuse(damaged(draw)) for _ in range(250))
    assert 10 < read < 240, "the damage should leave some texts right and make most wrong"


@settings(max_examples=300, deadline=None)
@given(st.text(st.sampled_from("".join(p for p in PIECES if len(p) == 1)), max_size=60))
def test_arbitrary_text_is_read_or_refused_with_places(text: str) -> None:
    read_or_refuse(text)


@settings(max_examples=300, deadline=None)
@given(st.lists(st.sampled_from([*PIECES, "A", "B", "k", " + ", "[A]"]), max_size=20).map("".join))
def test_arbitrary_rows_of_words_are_read_or_refused_with_places(text: str) -> None:
    read_or_refuse(text)
