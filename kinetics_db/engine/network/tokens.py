"""Names, numbers and signs of the notation, and where each stands.

Columns count characters from 1. Names are brought to Unicode NFC, so that a name typed with combining marks
is the same name.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from kinetics_db.errors import InvalidInput, Problem

RESERVED = {
    "hv": "a photon",
    "hν": "a photon",
    "nothing": "no species",
    "T": "the temperature in K",
}
MAX_NAME_LENGTH = 100
LONGEST_MESSAGE = 400

MEANT = {  # characters that word processors put in the place of the notation's own
    "−": "-", "–": "-", "—": "-", "×": "*", "·": "*", "∙": "*", "⋅": "*", "÷": "/", "＋": "+",
    "“": '"', "”": '"', "„": '"', "«": '"', "»": '"', "²": "^2", "³": "^3",
}  # fmt: skip

NUMBER = re.compile(r"(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")

TokenKind = Literal["number", "name", "species", "sign", "end"]


@dataclass(frozen=True, slots=True)
class Token:
    """One word of an expression; ``text`` of a species is its bare name."""

    kind: TokenKind
    text: str
    column: int


def is_letter(character: str) -> bool:
    """Whether a name may begin with it."""
    return character.isalpha()


def _is_name_character(character: str) -> bool:
    return character.isalnum() or character == "_" or unicodedata.category(character) in ("Mn", "Mc")


def is_species_character(character: str) -> bool:
    """Whether it may stand inside a species name without quotes."""
    return _is_name_character(character) or character in "*'."


def end_of_parameter(text: str, start: int) -> int:
    """Index after the parameter name that begins at ``start``; ``start`` itself where none begins."""
    if start >= len(text) or not (is_letter(text[start]) or text[start] == "_"):
        return start
    end = start + 1
    while end < len(text) and _is_name_character(text[end]):
        end += 1
    return end


def end_of_species(text: str, start: int) -> int:
    """Index after the bare species name that begins at ``start``; ``start`` itself where none begins."""
    if start >= len(text) or not is_letter(text[start]):
        return start
    end = start + 1
    while end < len(text) and is_species_character(text[end]):
        end += 1
    return end


def needs_quotes(name: str) -> bool:
    """Whether a species name has to be written in double quotes."""
    return end_of_species(name, 0) != len(name)


def quoted(name: str) -> str:
    """Species or observable name as the notation writes it."""
    return f'"{name}"' if needs_quotes(name) else name


def is_parameter_name(name: str) -> bool:
    """Whether a text is the name of a parameter by its characters alone."""
    return bool(name) and end_of_parameter(name, 0) == len(name)


def normal_name(name: str) -> str:
    """Name in Unicode NFC."""
    return unicodedata.normalize("NFC", name)


def refuse(message: str, line: int, column: int, cure: str = "") -> InvalidInput:
    """The error for one thing wrong at a place; what it quotes from the text is kept short."""
    return InvalidInput(Problem(_short(message), line=line, column=column, cure=_short(cure)))


def _short(text: str) -> str:
    return text if len(text) <= LONGEST_MESSAGE else f"{text[: LONGEST_MESSAGE // 2]} ... {text[-60:]}"


def check_name(name: str, line: int, column: int) -> str:
    """Name in NFC; InvalidInput when it is reserved, empty, too long or cannot be printed."""
    name = normal_name(name)
    if name in RESERVED:
        raise refuse(
            f"'{name}' is reserved: it stands for {RESERVED[name]}",
            line,
            column,
            f"another name, such as {name}1",
        )
    if not name.strip():
        raise refuse("the name between the quotes is empty", line, column, "a name")
    if name != name.strip():
        raise refuse(f'"{name}" begins or ends with a space', line, column, f'"{name.strip()}"')
    if len(name) > MAX_NAME_LENGTH:
        raise refuse(
            f"a name of {len(name)} characters",
            line,
            column,
            f"a name of at most {MAX_NAME_LENGTH} characters",
        )
    if not name.isprintable():
        raise refuse(
            "the name holds a character that cannot be seen", line, column, "visible characters and spaces"
        )
    return name


def read_species(text: str, start: int, line: int, column: int) -> tuple[str, int]:
    """Species name, bare or in quotes, beginning at ``text[start]``, and the index after it.

    ``column`` is the column of ``text[0]``. The index is ``start`` where no name begins.
    """
    if start < len(text) and text[start] == '"':
        close = text.find('"', start + 1)
        if close < 0:
            raise refuse("this quote is not closed", line, column + start, 'a second " after the name')
        return check_name(text[start + 1 : close], line, column + start), close + 1
    end = end_of_species(text, start)
    if end == start:
        return "", start
    return check_name(text[start:end], line, column + start), end


def skip_spaces(text: str, start: int) -> int:
    """Index of the first character from ``start`` on that is no white space."""
    while start < len(text) and text[start].isspace():
        start += 1
    return start


def tokenise(text: str, line: int, column: int) -> Iterator[Token]:
    """Words of an expression, closed by one of kind 'end'; InvalidInput at what is no word of it."""
    at = 0
    while True:
        at = skip_spaces(text, at)
        here = column + at
        if at == len(text):
            yield Token("end", "", here)
            return
        character = text[at]
        if number := NUMBER.match(text, at):
            yield Token("number", number.group(), here)
            at = number.end()
        elif (end := end_of_parameter(text, at)) > at:
            yield Token("name", normal_name(text[at:end]), here)
            at = end
        elif character == "[":
            name, at = _read_concentration(text, at, line, column)
            yield Token("species", name, here)
        elif text.startswith("**", at):
            raise refuse("'**' is not used here", line, here, "^ for a power, as in [A]^2")
        elif character in "+-*/^()":
            yield Token("sign", character, here)
            at += 1
        else:
            raise _unexpected(character, line, here)


def _read_concentration(text: str, start: int, line: int, column: int) -> tuple[str, int]:
    """Species name of ``[name]`` whose bracket opens at ``start``, and the index after the closing one."""
    begin = skip_spaces(text, start + 1)
    name, end = read_species(text, begin, line, column)
    after = skip_spaces(text, end)
    if name and after < len(text) and text[after] == "]":
        return name, after + 1
    close = text.find("]", start)
    if close < 0:
        raise refuse("this bracket is not closed", line, column + start, "] after the species name")
    inside = text[start + 1 : close].strip()
    if not inside:
        raise refuse(
            "there is no species between the brackets", line, column + start, "a species name, as in [A]"
        )
    if name and text[after] == "^":
        raise refuse(
            f"'[{inside}]': this version cannot use isotopic labels yet",
            line,
            column + start,
            "a species of its own for each isotopologue; a power stands after the bracket, as in [A]^2",
        )
    bare = inside.replace('"', "")
    raise refuse(f"'{inside}' is not a plain species name", line, column + begin, f'quotes: ["{bare}"]')


def _unexpected(character: str, line: int, column: int) -> InvalidInput:
    if character in MEANT:
        return refuse(f"'{character}' is not used here", line, column, f"{MEANT[character]} instead")
    if character == ",":
        return refuse("a comma is not used here", line, column, "a decimal point, as in 0.5")
    if character in "{}":
        return refuse(f"'{character}' is not used inside an expression", line, column, "( and )")
    if character == "]":
        return refuse("this bracket was not opened", line, column, "[ before the species name")
    if character == '"':
        return refuse("a quoted species stands without brackets", line, column, 'brackets: ["name"]')
    if character == "=":
        return refuse("a second '='", line, column, "one expression")
    shown = character if character.isprintable() else f"U+{ord(character):04X}"
    return refuse(
        f"'{shown}' is not part of the notation",
        line,
        column,
        "numbers, parameters, [species], T, + - * / ^ ( )",
    )
