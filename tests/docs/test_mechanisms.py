"""The reference of the notation and the parser say the same."""

from __future__ import annotations

import re
from collections.abc import Sequence

import pytest

from kinetics_db.engine import parse_mechanism
from kinetics_db.errors import InvalidInput, Problem
from tests.docs.fences import DOCS, ROOT, Block, blocks_in_docs, blocks_of
from tests.docs.messages import messages_in

PAGE = DOCS / "reference" / "mechanism-notation.md"
NOT_OF_A_TEXT = {"expressions.py", "units_of_constants.py"}  # raised on use, when values or units are given


def named(blocks: Sequence[Block]) -> list[object]:
    return [pytest.param(block, id=str(block)) for block in blocks]


@pytest.mark.parametrize("block", named(blocks_in_docs("mechanism")))
def test_a_mechanism_shown_in_the_docs_parses_without_a_warning(block: Block) -> None:
    assert parse_mechanism(block.text).warnings == ()


@pytest.mark.parametrize("block", named(blocks_in_docs("mechanism-with-error")))
def test_a_mechanism_shown_as_wrong_is_refused_with_the_messages_shown(block: Block) -> None:
    with pytest.raises(InvalidInput) as refused:
        parse_mechanism(block.text)
    assert told(refused.value.problems) == output_after(block)


@pytest.mark.parametrize("block", named(blocks_in_docs("mechanism-with-warning")))
def test_a_mechanism_shown_with_a_warning_parses_and_warns_as_shown(block: Block) -> None:
    assert told(parse_mechanism(block.text).warnings) == output_after(block)


def told(problems: Sequence[Problem]) -> str:
    return "".join(f"{problem}\n" for problem in problems)


def output_after(block: Block) -> str:
    following = [b for b in blocks_of(block.page) if b.line > block.line]
    assert following and following[0].kind == "text", f"{block}: the messages are not shown"
    return following[0].text


def test_every_message_of_the_parser_stands_in_the_reference_and_no_other() -> None:
    in_code = set(messages_in(ROOT / "kinetics_db" / "engine" / "network", without=NOT_OF_A_TEXT))
    tables = [line for line in PAGE.read_text(encoding="utf-8").splitlines() if line.startswith("| `")]
    start = tables.index(next(line for line in tables if "the mechanism has no step" in line))
    in_docs = {span for line in tables[start:] for span in re.findall(r"`([^`]+)`", line.split(" | ")[0])}
    assert in_docs - in_code == set(), "in the reference, but not in the code"
    assert in_code - in_docs == set(), "in the code, but not in the reference"
