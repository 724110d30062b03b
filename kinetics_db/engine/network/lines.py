"""From text to statements: lines without comments, with quoted names masked while looking for signs."""

from __future__ import annotations

from typing import NamedTuple

from kinetics_db.engine.network.tokens import refuse
from kinetics_db.errors import InvalidInput, Problem

MAX_BYTES = 100_000
MAX_STEPS = 2_000
MASK = "\x00"  # control characters are refused in the text, so this one is free


class Line(NamedTuple):
    """One line without its comment.

    ``masked`` has the same length as ``text``, with every character of a quoted name replaced, so that a sign
    found in it is a sign of the notation.
    """

    number: int
    text: str
    masked: str


class Split(NamedTuple):
    """Lines that hold a statement, those that cannot be taken for one, and why not."""

    lines: list[Line]
    refused: list[str]
    problems: list[Problem]


def split_lines(text: str) -> Split:
    """Lines of a text without comments; control characters and open quotes are told.

    Raises
    ------
    InvalidInput
        When the text is larger than 100 kB.
    """
    size = len(text.encode("utf-8", "surrogatepass"))
    if size > MAX_BYTES:
        raise InvalidInput(f"a mechanism of {size} bytes", field="text", cure=f"at most {MAX_BYTES} bytes")
    split = Split([], [], [])
    text = text.removeprefix("\ufeff").replace("\r\n", "\n").replace("\r", "\n")
    for number, raw in enumerate(text.split("\n"), start=1):
        try:
            _check_characters(raw, number)
            line = _without_comment(raw, number)
        except InvalidInput as error:
            split.problems.extend(error.problems)
            split.refused.append(raw)
            continue
        if line.text.strip():
            split.lines.append(line)
    return split


def _check_characters(raw: str, number: int) -> None:
    """Refuse what no editor shows and no database keeps: control characters and halves of surrogate pairs."""
    if raw.isprintable():
        return
    for column, character in enumerate(raw, start=1):
        if (
            (character < " " and character != "\t")
            or "\ud800" <= character <= "\udfff"
            or character == "\x7f"
        ):
            raise refuse(f"a control character, U+{ord(character):04X}", number, column, "visible characters")


def _without_comment(raw: str, number: int) -> Line:
    masked: list[str] = []
    opened = -1
    for at, character in enumerate(raw):
        if opened >= 0:
            masked.append(MASK)
            if character == '"':
                opened = -1
        elif character == '"':
            opened = at
            masked.append(MASK)
        elif character == "#":
            break
        else:
            masked.append(character)
    if opened >= 0:
        raise refuse("this quote is not closed", number, opened + 1, 'a second " after the name')
    text = raw[: len(masked)]
    return Line(number, text, "".join(masked))
