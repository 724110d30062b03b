"""Reader of delimited text: the messy tables that instruments and spreadsheets export."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.reading.cells import Clock
from kinetics_db.engine.reading.decoding import lines_of
from kinetics_db.engine.reading.headers import Header, parse_header, unit_of_cell, with_unit
from kinetics_db.engine.reading.layout import MAX_COLUMNS, Layout, find_layout, is_comment
from kinetics_db.engine.reading.options import TIME_FORMATS, ReadingOptions
from kinetics_db.engine.reading.result import ReadResult
from kinetics_db.engine.reading.rows import Rows, read_rows
from kinetics_db.engine.tables import MAX_VALUES, Column, Table
from kinetics_db.engine.units import convert, kind_of_unit
from kinetics_db.errors import InvalidInput, Problem

_ENTRY = re.compile(r"([^:=\t;,|]{1,80}?)\s*[:=\t;,|]\s*(\S.*)")
SHOWN = 10


def read_delimited(data: bytes, options: ReadingOptions | None = None) -> ReadResult:
    """Read delimited text into a signal table.

    Parameters
    ----------
    data : the bytes of the file, at most 200 MB
    options : what is known about the file; everything else is found out and noted

    Returns
    -------
    ReadResult
        table with one 'time' column in s and 'signal' columns in the units of the file.

    Raises
    ------
    InvalidInput
        with line and cure, for whatever is not such a table or can be read in two ways.
    """
    options = options or ReadingOptions()
    lines, notes = lines_of(data, options.encoding)
    cut_short = bool(lines[-1].strip())
    layout = find_layout(lines, options)
    notes += layout.notes
    headers = _headers(layout, options, notes)
    time = _time_position(headers, options)
    clock = _clock(headers[time], options)
    skipped = {i for i, h in enumerate(headers) if h.name in options.ignored_columns}
    numbers, kept, comments = _data_lines(lines, layout, options, notes)
    if len(kept) * len(headers) > MAX_VALUES:
        raise InvalidInput(
            f"{len(kept)} rows of {len(headers)} values are too many", cure=f"{MAX_VALUES} values"
        )
    rows = read_rows(kept, numbers, layout, time, clock, frozenset(skipped), cut_short=cut_short)
    clock = _settled(clock, rows, time, options, notes)
    order = _time_order(rows.values[:, time], numbers, options, notes)
    columns = [i for i in range(len(headers)) if i != time and i not in skipped]
    if not columns:
        raise InvalidInput("there is no signal beside the time", cure="at least one more column")
    table = Table(
        (
            Column(headers[time].name, "s", "time"),
            *(Column(headers[i].name, headers[i].unit or "", "signal") for i in columns),
        ),
        rows.values[order][:, [time, *columns]],
    )
    notes += _describe(headers, time, clock, columns, skipped, numbers, rows)
    warnings = _unknown_units(headers, layout, options) + _warnings(table, rows, headers)
    comments = [*layout.preamble, *comments]
    return ReadResult(table, tuple(notes), tuple(warnings), _metadata(comments, options))


def _headers(layout: Layout, options: ReadingOptions, notes: list[str]) -> list[Header]:
    """One header per column, with the overrides applied."""
    if layout.width > MAX_COLUMNS:
        raise InvalidInput(f"the table has {layout.width} columns", cure=f"at most {MAX_COLUMNS}")
    cells = list(layout.header)
    if options.columns is not None:
        if len(options.columns) != layout.width:
            message = f"{len(options.columns)} names are stated for {layout.width} columns"
            raise InvalidInput(message, field="columns", cure="one name per column of the file")
        stated = [Header(name) for name in options.columns]
        found = [parse_header(cell) for cell in cells] if len(cells) == layout.width else stated
        headers = [Header(s.name, f.unit, f.clock) for s, f in zip(stated, found, strict=True)]
        notes.append("column names are as stated")
    else:
        if len(cells) != layout.width:
            message = f"the header has {len(cells)} cells, the rows have {layout.width}"
            cure = "a name for every column; decimal commas cannot stand in a table separated by commas"
            raise InvalidInput(Problem(message, line=max(1, layout.first - 1), cure=cure))
        headers = [parse_header(cell) for cell in cells]
    units = [unit_of_cell(cell) or "" for cell in layout.units_row]
    headers = [with_unit(h, unit) for h, unit in zip(headers, units, strict=True)]
    _refuse_unnamed(headers)
    by_name = dict(options.units)
    names = [h.name for h in headers]
    for field, wanted in (("units", by_name), ("ignored_columns", options.ignored_columns)):
        absent = [name for name in wanted if name not in names]
        if absent:
            raise InvalidInput(
                f"there is no column '{absent[0]}'", field=field, cure="one of " + ", ".join(names)
            )
    return [Header(h.name, by_name.get(h.name, h.unit), h.clock) for h in headers]


def _refuse_unnamed(headers: Sequence[Header]) -> None:
    problems = []
    seen: dict[str, int] = {}
    for position, header in enumerate(headers, start=1):
        if not header.name:
            problems.append(
                Problem(f"column {position} has no name", field="columns", cure="name it in the file")
            )
        elif header.name in seen:
            message = f"columns {seen[header.name]} and {position} are both called '{header.name}'"
            problems.append(Problem(message, field="columns", cure="different names, or the option columns"))
        seen.setdefault(header.name, position)
    if problems:
        raise InvalidInput(problems)


def _time_position(headers: Sequence[Header], options: ReadingOptions) -> int:
    names = [h.name for h in headers]
    if options.time_column is not None:
        if options.time_column in names:
            return names.index(options.time_column)
        message = f"there is no column '{options.time_column}'"
        raise InvalidInput(message, field="time_column", cure="one of " + ", ".join(names[:20]))
    named = [i for i, h in enumerate(headers) if h.is_time and h.name not in options.ignored_columns]
    with_unit = [i for i in named if headers[i].unit or headers[i].clock]
    by_unit = [i for i, h in enumerate(headers) if h.unit and kind_of_unit(h.unit) == "time"]
    for choice in (named, with_unit, by_unit if not named else []):
        if len(choice) == 1:
            return choice[0]
    what = "several columns could be" if named or by_unit else "no column is named as"
    shown = ", ".join(names[i] for i in named or by_unit) if named or by_unit else ", ".join(names[:20])
    raise InvalidInput(f"{what} the time: {shown}", field="time_column", cure="state the option time_column")


def _clock(header: Header, options: ReadingOptions) -> Clock:
    unit = options.time_unit or header.unit or ""
    if unit and kind_of_unit(unit) != "time":
        message = f"the time column '{header.name}' is in '{unit}', which is no unit of time"
        raise InvalidInput(message, field="time_unit", cure="state the option time_unit: s, min, h or d")
    # 'h:mm:ss' in a header does not tell what a time with one colon is
    in_header = header.clock if header.clock in TIME_FORMATS else ""
    return Clock(unit, options.time_format or in_header)


def _settled(clock: Clock, rows: Rows, time: int, options: ReadingOptions, notes: list[str]) -> Clock:
    """The clock with the form of times with one colon; puts them right when they are h:mm.

    Other cells tell it by a fraction of the last part, which only seconds have, or when the rows are in the
    order of time in one of the two forms only.
    """
    colons = [row for row, _, _ in rows.one_colon]
    if not rows.values[colons, time].any():
        return clock  # 0:00 is zero in both
    if any("." in text or "," in text for _, _, text in rows.one_colon):
        notes.append("times with one colon are mm:ss: some have fractions of a second")
        return Clock(clock.unit, "mm:ss")
    longer = rows.values[:, time].copy()
    longer[colons] *= 60  # h:mm is 60 times what mm:ss is
    minutes, hours = (bool((np.diff(times) > 0).all()) for times in (rows.values[:, time], longer))
    if minutes == hours or options.sort_times:
        _, line, text = next(cell for cell in rows.one_colon if rows.values[cell[0], time])
        message = f"the time '{text}' can be h:mm or mm:ss, and no other cell tells which"
        cure = "state the option time_format: 'h:mm' or 'mm:ss'"
        raise InvalidInput(Problem(message, line=line, column=time + 1, field="time_format", cure=cure))
    form, other = ("mm:ss", "h:mm") if minutes else ("h:mm", "mm:ss")
    notes.append(f"times with one colon are {form}: as {other} the rows would not be in the order of time")
    if hours:
        rows.values[:, time] = longer
    return Clock(clock.unit, form)


def _data_lines(
    lines: Sequence[str], layout: Layout, options: ReadingOptions, notes: list[str]
) -> tuple[NDArray[np.int64], list[str], list[tuple[int, str]]]:
    """Line numbers and texts of the rows, and the comments between them."""
    numbers, kept, comments, bare = [], [], [], []
    marks = (*options.comment_prefixes, *((";",) if layout.delimiter != ";" else ()))
    for number in range(layout.first, len(lines) + 1):
        line = lines[number - 1]
        if line.startswith(marks) or (
            line[:1] in (" ", "\t", '"') and _aside(line, options, layout.delimiter)
        ):
            comments.append((number, line))
        elif line[:1] == layout.delimiter and not line.strip(layout.delimiter + " "):
            bare.append(number)  # spreadsheets write empty rows as delimiters
        elif line and not line.isspace():
            numbers.append(number)
            kept.append(line)
    if not kept:
        cure = "at least one row of numbers below the header"
        raise InvalidInput(Problem("there are no rows of data", line=max(1, layout.first - 1), cure=cure))
    if bare:
        notes.append(f"{_count(len(bare), 'empty row')} left out, first in line {bare[0]}")
    return np.array(numbers, dtype=np.int64), kept, comments


def _aside(line: str, options: ReadingOptions, delimiter: str) -> bool:
    return is_comment(line.strip().lstrip('"'), options, delimiter)


def _time_order(
    times: NDArray[np.float64], numbers: NDArray[np.int64], options: ReadingOptions, notes: list[str]
) -> NDArray[np.int64]:
    """Row order by time; refuses repeated times, and disorder unless sorting is asked for."""
    order = np.argsort(times, kind="stable").astype(np.int64)
    ordered = times[order]
    same = np.flatnonzero(np.diff(ordered) == 0)
    if same.size:
        first, second = sorted((int(numbers[order[same[0]]]), int(numbers[order[same[0] + 1]])))
        message = f"the time {ordered[same[0]]:g} s stands in line {first} too"
        raise InvalidInput(
            Problem(message, line=second, cure="one row per time; repeated readings in own files")
        )
    back = np.flatnonzero(np.diff(times) < 0)
    if not back.size:
        return order
    line = int(numbers[back[0] + 1])
    if not options.sort_times:
        message = f"the time goes back to {times[back[0] + 1]:g} s"
        cure = "rows in the order of time, or the option sort_times"
        raise InvalidInput(Problem(message, line=line, field="sort_times", cure=cure))
    notes.append(f"rows are sorted by time, as asked (first out of order in line {line})")
    return order


def _describe(
    headers: Sequence[Header], time: int, clock: Clock, columns: Sequence[int], skipped: set[int],
    numbers: NDArray[np.int64], rows: Rows,
) -> list[str]:  # fmt: skip
    name = headers[time].name
    notes = []
    if clock.unit and convert(1.0, clock.unit, "s") != 1:
        notes.append(f"time is column '{name}', its numbers in {clock.unit}, converted to s")
    elif clock.unit:
        notes.append(f"time is column '{name}' in s")
    else:
        notes.append(f"time is column '{name}'; every cell carries its own unit or colons; converted to s")
    if rows.own_units:
        what = _count(rows.own_units, "time")
        notes.append(f"{what} with an own unit or colons ({clock.colons or 'mm:ss, h:mm:ss'})")
    signals = [f"{headers[i].name} ({headers[i].unit or 'no unit stated'})" for i in columns]
    more = f" and {len(signals) - SHOWN} more" if len(signals) > SHOWN else ""
    notes.append(f"{_count(len(signals), 'signal')}: " + ", ".join(signals[:SHOWN]) + more)
    if skipped:
        notes.append("not read, as stated: " + ", ".join(headers[i].name for i in sorted(skipped)))
    notes.append(f"{_count(len(numbers), 'row')}, lines {numbers[0]} to {numbers[-1]}")
    if rows.trailing:
        end = "a delimiter" if rows.trailing == 1 else "empty columns"
        notes.append(f"{end} at the end of lines {'is' if rows.trailing == 1 else 'are'} ignored")
    for cells, what in (
        (rows.missing, "missing"),
        (rows.limits, "beyond a detection limit, taken as missing"),
    ):
        if cells:
            places = [
                f"line {n} '{headers[c].name}'" + (f" ('{t}')" if t else "") for n, c, t in cells[:SHOWN]
            ]
            more = f" and {len(cells) - SHOWN} more" if len(cells) > SHOWN else ""
            notes.append(f"{_count(len(cells), 'cell')} {what}: " + ", ".join(places) + more)
    return notes


def _count(number: int, what: str) -> str:
    return f"{number} {what}" if number == 1 else f"{number} {what}s"


def _unknown_units(headers: Sequence[Header], layout: Layout, options: ReadingOptions) -> list[Problem]:
    found = []
    known = {*options.ignored_columns, *(name for name, _ in options.units)}
    for column, (header, cell) in enumerate(zip(headers, layout.units_row, strict=True), start=1):
        if unit_of_cell(cell) is None and header.name not in known:
            message = f"'{cell}' is no unit that is known; column '{header.name}' is read without it"
            cure = f"the option units, such as {{'{header.name}': 'a.u.'}}"
            line = layout.units_line
            found.append(Problem(message, line, column, field="units", cure=cure, severity="warning"))
    return found


def _warnings(table: Table, rows: Rows, headers: Sequence[Header]) -> list[Problem]:
    found = []
    for number, column, text in rows.limits[:SHOWN]:
        message = f"'{text}' in column '{headers[column].name}' is a detection limit and is taken as missing"
        cure = "export the measured value where the instrument gives it"
        found.append(Problem(message, line=number, column=column + 1, cure=cure, severity="warning"))
    empty = [name for name in table.names("signal") if np.isnan(table.column(name, "signal")).all()]
    return found + [Problem(f"column '{n}' holds no value", field=n, severity="warning") for n in empty]


def _metadata(lines: Sequence[tuple[int, str]], options: ReadingOptions) -> tuple[tuple[str, str], ...]:
    """'key: value' and 'key; value' lines as pairs, others under their line number."""
    entries = []
    for number, line in lines[:1000]:
        text = line[:2000].strip()
        for prefix in (*options.comment_prefixes, ";"):
            text = text.removeprefix(prefix)
        text = text.strip().rstrip(";,|\t").replace('"', "").strip()
        match = _ENTRY.fullmatch(text)
        if match:
            entries.append((match[1].strip(), match[2].strip()))
        elif any(sign.isalnum() for sign in text):
            entries.append((f"line {number}", text))
    return tuple(entries)
