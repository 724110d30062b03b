"""Names and notes as they may be stored: one Unicode form, no invisible characters, no more than fits."""

from __future__ import annotations

import unicodedata

from kinetics_db.errors import InvalidInput

NOTE = 1000
"""Longest reason or note."""


def plain_text(
    value: object,
    *,
    field: str,
    what: str = "",
    longest: int = NOTE,
    required: bool = False,
    lines: bool = False,
) -> str:
    """Text in Unicode NFC without blanks at its ends.

    Hashes are over NFC, so names are stored and compared in it; two writings of one name are one name.

    Parameters
    ----------
    field, what : where the text stands, and what it names ('a run'), for the message
    longest : most characters
    required : whether it may not be empty
    lines : whether line breaks and tabs may stand inside, as in notes

    Raises
    ------
    InvalidInput
        when it is no text, empty, too long, or holds control characters or lone surrogates, which databases
        refuse and people cannot see.
    """
    if not isinstance(value, str):
        raise InvalidInput(f"{type(value).__name__} in place of text", field=field, cure="text")
    text = unicodedata.normalize("NFC", value).strip()
    named = f"{what} needs a {field}" if what else f"{field} is empty"
    if required and not text:
        raise InvalidInput(named, field=field, cure=f"1 to {longest} characters")
    if len(text) > longest:
        raise InvalidInput(
            f"{len(text)} characters are too many", field=field, cure=f"at most {longest} characters"
        )
    for position, character in enumerate(text, start=1):
        if lines and character in "\n\t\r":
            continue
        if unicodedata.category(character) in ("Cc", "Cs"):
            raise InvalidInput(
                f"character {position} (U+{ord(character):04X}) cannot be stored",
                field=field,
                cure="visible characters",
            )
    return text
