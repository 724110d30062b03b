"""Every text of an entry in its stored form."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.runs.entry import LONGEST, WITH_LINES, RunEntry

TEXTS = ("code", "atmosphere", "started", "replicate_of", "control_kind", "notes")


def cleaned(entry: RunEntry) -> RunEntry:
    """The entry with every text in its stored form; InvalidInput names what cannot be stored."""
    clean, problems = clean_what_can_be(entry)
    if problems:
        raise InvalidInput(problems)
    return clean


def clean_what_can_be(entry: RunEntry) -> tuple[RunEntry, list[Problem]]:
    """As `cleaned`, but with the problems beside an entry that is empty where a text cannot be stored."""
    problems: list[Problem] = []

    def text(value: object, field: str, kind: str) -> str:
        try:
            return plain_text(value, field=field, longest=LONGEST[kind], lines=kind in WITH_LINES)
        except InvalidInput as error:
            problems.extend(error.problems)
            return ""

    charges = []
    for i, charge in enumerate(entry.charges, start=1):
        where = f"charges.{i}"
        sources = {name: getattr(charge, name) for name in ("compound", "lot", "stock")}
        named: dict[str, Any] = {
            name: None if value is None else text(value, where, "source") for name, value in sources.items()
        }
        charges.append(replace(charge, note=text(charge.note, f"{where}.note", "note"), **named))
    sections = {
        section: {
            key: text(value, f"sections.{section}.{key}", "section") if isinstance(value, str) else value
            for key, value in values.items()
        }
        for section, values in entry.sections.items()
    }
    texts: dict[str, Any] = {name: text(getattr(entry, name), name, name) for name in TEXTS}
    return replace(entry, charges=charges, sections=sections, **texts), problems
