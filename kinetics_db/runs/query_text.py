"""A query for runs as one line, for the filter of a list and for saved links.

Parts stand between commas, in any order, and all must hold::

    [ArX]0 50..150 mM     put in at that concentration; '[ArX]0' alone: put in at all; percent as '90..100 %'
    40 degC, T 300..310 K temperature          10 mL, V 5..20 mL     volume
    after 2026-03-01      logged on that day or later                before 2026-04-01   before that day
    by mira               who logged it        replicate of K01      repeats that run
    control blank         that kind of control; 'control any', 'no control'
    has table, no table   whether it has a concentration table
    project oxidation     of that project
    K0, code K0           the code begins so

Names that hold a comma, a bracket or a quotation mark stand in quotation marks, doubled inside.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace
from datetime import date
from typing import Any

from kinetics_db.engine.plain_text import plain_text
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.runs.entry import CONTROL_KINDS
from kinetics_db.runs.query import ANY, Range, RunQuery, StartRange
from kinetics_db.runs.query_ranges import EXAMPLE, looks_like_range, range_from_text

LONGEST = 1000
FIELD = "filter"
ACCEPTED = (
    "[compound]0 50..150 mM, 40 degC, 10 mL, after 2026-03-01, before 2026-04-01, by name, control blank, "
    "no control, replicate of K01, has table, no table, project name, or how a code begins"
)
NO_WAVELENGTHS = "wavelengths of lamps are not recorded yet"
WITHOUT_WAVELENGTHS = "leave it out; temperature, volume and concentrations can be searched"
DATE_CURE = "a day such as 2026-03-01"
CONTROL_CURE = ", ".join((ANY, *(kind for kind in CONTROL_KINDS if kind)))

_STARTS_WITH_WORD = re.compile(r"([A-Za-z]+)(?:(?:\s+|(?=[<>≤≥]))(.*))?\Z", re.DOTALL)


def query_from_text(text: str) -> RunQuery:
    """See `RunQuery.from_text`."""
    if not isinstance(text, str) or len(text) > LONGEST:
        raise InvalidInput("the filter is too long", field=FIELD, cure=f"at most {LONGEST} characters")
    problems: list[Problem] = []
    query = RunQuery()
    for column, part in _parts(text):
        try:
            changes = _read(part)
            twice = [
                name
                for name in changes
                if name != "starts" and getattr(query, name) != getattr(RunQuery(), name)
            ]
            if twice:
                raise InvalidInput(f"the {twice[0]} stands twice", cure="once, or a range")
            if "starts" in changes:
                changes["starts"] = (*query.starts, *changes["starts"])
            query = replace(query, **changes)
        except InvalidInput as error:
            problems += [Problem(p.message, 1, column, FIELD, p.cure) for p in error.problems]
    if problems:
        raise InvalidInput(problems)
    return query


def text_of_query(query: RunQuery) -> str:
    """See `RunQuery.to_text`."""
    return ", ".join(_written(query))


def _written(query: RunQuery) -> Iterator[str]:
    for start in query.starts:
        stored = "%" if start.relative else "mol/L"
        span = f" {range_to_text(start.range, stored)}" if start.range else ""
        yield f"[{_quoted(start.compound, within_brackets=True)}]0{span}"
    if query.temperature is not None:
        yield f"T {range_to_text(query.temperature, 'K')}"
    if query.volume is not None:
        yield f"V {range_to_text(query.volume, 'L')}"
    for word, day in (("after", query.after), ("before", query.before)):
        if day is not None:
            yield f"{word} {day.isoformat()}"
    for words, name in (
        ("by", query.author),
        ("replicate of", query.replicate_of),
        ("project", query.project),
    ):
        if name:
            yield f"{words} {_quoted(name)}"
    if query.control is not None:
        yield f"control {query.control}" if query.control else "no control"
    if query.table is not None:
        yield "has table" if query.table else "no table"
    if query.code:
        yield f"code {_quoted(query.code)}"


def range_to_text(span: Range, unit: str) -> str:
    """A range as it was typed, else in its stored unit at full precision."""
    if span.text:
        return span.text
    low, high = ("" if end is None else repr(float(end)) for end in (span.low, span.high))
    return f"{low}..{high} {unit}"


def _quoted(name: str, *, within_brackets: bool = False) -> str:
    """A name as it may stand in a line: in quotation marks where it could be read otherwise."""
    inside, balance = name.replace("[", "").replace("]", ""), 0
    for letter in name:
        balance += {"[": 1, "]": -1}.get(letter, 0)
        if balance < 0:
            break
    plain = '"' not in name and (within_brackets or "," not in name) and balance == 0
    if plain and (within_brackets or inside == name):
        return name
    return '"' + name.replace('"', '""') + '"'


def _parts(text: str) -> Iterator[tuple[int, str]]:
    """Parts between the commas outside of brackets and quotation marks, each with its column from 1."""
    begin, depth, quoted, opened = 0, 0, False, 0
    for position, letter in enumerate(text + ","):
        if letter == '"' and position < len(text):
            quoted, opened = not quoted, opened if quoted else position
        elif quoted:
            continue
        elif letter == "[":
            depth, opened = depth + 1, opened if depth else position
        elif letter == "]" and depth:
            depth -= 1
        elif letter == "," and not depth:
            if text[position - 1 : position].isdecimal() and text[position + 1 : position + 2].isdecimal():
                around = f"{text[begin:position].strip()[-20:]},{text[position + 1 : position + 10]}"
                message = f"'{around}' has a comma between digits"
                cure = "a decimal point, or a blank after the comma between two conditions"
                raise InvalidInput(Problem(message, 1, position + 1, FIELD, cure))
            part = text[begin:position]
            if part.strip():
                yield begin + len(part) - len(part.lstrip()) + 1, part.strip()
            begin = position + 1
    if quoted or depth:
        mark = "quotation mark" if quoted else "bracket"
        raise InvalidInput(Problem(f"a {mark} is not closed", 1, opened + 1, FIELD, ACCEPTED))


def _read(part: str) -> dict[str, Any]:
    """What one part of a line states, by the names of `RunQuery`."""
    if part.startswith("["):
        return _start(part)
    match = _STARTS_WITH_WORD.match(part)
    word, rest = (match[1], (match[2] or "").strip()) if match else ("", "")
    if word in ("T", "V") or word.lower() in ("temperature", "volume", "wavelength"):
        return _condition({"t": "temperature", "v": "volume"}.get(word.lower(), word.lower()), rest)
    reader = _WORDS.get(word.lower())
    if reader is not None and (rest or word.lower() not in ("has", "no")):
        return reader(rest)
    if looks_like_range(part) and _has_known_unit(part):
        return _condition("", part)
    if part.startswith('"') or not re.search(r"\s|[<>≤≥]|\.\.", part):
        return {"code": _name(part, "code")}
    raise InvalidInput(f"'{part[:60]}' is not understood", cure=ACCEPTED)


def _has_known_unit(part: str) -> bool:
    """Whether a part that begins with a number is meant as a range; '17' and '5-B' may be codes."""
    if re.search(r"\s|[<>≤≥%]|\.\.", part):
        return True
    try:
        range_from_text(part)
    except InvalidInput:
        return False
    return True


def _start(part: str) -> dict[str, Any]:
    end = _closing(part)
    if end < 0:
        raise InvalidInput("the bracket is not closed", cure="for example [ArX]0 50..150 mM")
    compound = _name(part[1:end], "compound")
    rest = re.sub(r"\A[0₀](?=\s|\Z|[<>≤≥])", "", part[end + 1 :]).strip()
    if not rest:
        return {"starts": (StartRange(compound),)}
    span, kind = range_from_text(rest)
    if kind not in ("concentration", "relative"):
        raise InvalidInput(f"a {kind} is no concentration", cure=EXAMPLE)
    return {"starts": (StartRange(compound, span, kind == "relative"),)}


def _closing(part: str) -> int:
    """Where the bracket that a part begins with is closed; -1 where it is not."""
    depth, quoted = 0, False
    for position, letter in enumerate(part):
        if letter == '"':
            quoted = not quoted
        elif not quoted:
            depth += {"[": 1, "]": -1}.get(letter, 0)
            if not depth:
                return position
    return -1


def _condition(expected: str, text: str) -> dict[str, Any]:
    if expected == "wavelength":
        raise InvalidInput(NO_WAVELENGTHS, cure=WITHOUT_WAVELENGTHS)
    span, kind = range_from_text(text)
    if kind == "length" and not expected:
        raise InvalidInput(NO_WAVELENGTHS, cure=WITHOUT_WAVELENGTHS)
    if kind == "concentration" and not expected:
        raise InvalidInput("a concentration of what?", cure=f"the compound before it: [ArX]0 {span.text}")
    if kind not in ("temperature", "volume") or (expected and kind != expected):
        sought = f"a {expected}" if expected else "a temperature or volume"
        raise InvalidInput(f"'{text[:60]}' is not {sought}", cure="for example 40 degC, 300..310 K, 10 mL")
    return {kind: span}


def _name(text: str, what: str, *, longest: int = 150) -> str:
    text = text.strip()
    if len(text) > 1 and text[0] == text[-1] == '"':
        text = text[1:-1].replace('""', '"')
    elif '"' in text:
        raise InvalidInput(
            f"a quotation mark in {text[:60]}", cure='the whole name in "...", marks inside doubled'
        )
    return plain_text(text, field=what, longest=longest, required=True)


def _day(name: str, text: str) -> dict[str, Any]:
    return {name: day_from_text(text)}


def day_from_text(text: str) -> date:
    """A day in ISO form; InvalidInput for anything else."""
    if re.fullmatch(r"\d{4}-\d{2}-\d{2}", text, re.ASCII):
        try:
            return date.fromisoformat(text)
        except ValueError:
            pass
    raise InvalidInput(f"'{text[:60]}' is no day", cure=DATE_CURE)


def control_from_text(text: str) -> str:
    """A kind of control, 'any', or '' for 'none'; InvalidInput lists what there is."""
    if text in ("", ANY, "none"):
        return {"": ANY, ANY: ANY, "none": ""}[text]
    if text not in CONTROL_KINDS:
        raise InvalidInput(f"'{text[:60]}' is no kind of control", cure=CONTROL_CURE)
    return text


def _replicate(text: str) -> dict[str, Any]:
    code = re.sub(r"\Aof\s+", "", text)
    return {"replicate_of": _name(code, "code of a run")}


def _whether(text: str, *, has: bool) -> dict[str, Any]:
    if text in ("table", "tables", "a table"):
        return {"table": has}
    if text == "control" and not has:
        return {"control": ""}
    raise InvalidInput(f"'{text[:60]}' is not understood", cure="has table, no table, no control")


_WORDS = {
    "after": lambda text: _day("after", text),
    "before": lambda text: _day("before", text),
    "by": lambda text: {"author": _name(text, "name")},
    "control": lambda text: {"control": control_from_text(text)},
    "code": lambda text: {"code": _name(text, "code")},
    "project": lambda text: {"project": _name(text, "project")},
    "replicate": _replicate,
    "has": lambda text: _whether(text, has=True),
    "no": lambda text: _whether(text, has=False),
}
