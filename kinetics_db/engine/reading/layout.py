"""How a delimited text is laid out: comments, delimiter, decimal sign, header, first row of data.

Nothing is decided from one line. Each pair of delimiter and decimal sign is judged by how many rows of a
sample it makes sense of; the header is the line above the data that names a time column.
"""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from kinetics_db.engine.reading.cells import is_number, looks_like_value
from kinetics_db.engine.reading.headers import (
    has_unit_of_signal,
    is_time_unit,
    is_units_row,
    parse_header,
    unit_of_cell,
)
from kinetics_db.engine.reading.options import DELIMITERS, ReadingOptions
from kinetics_db.errors import InvalidInput, Problem

MAX_LINE = 200_000
MAX_COLUMNS = 2_000
SAMPLE = 300
SAMPLE_CHARACTERS = 150_000
HEADER_SEARCH = 2_000
HEADER_CELLS = 200_000
"""Most lines, and most cells of them, among which a header is looked for."""

_RULE = re.compile(r"[-=_+|;,\s*]+")
_BELOW_ONE_OR_ODD = re.compile(r"(?<![\d.,])[+-]?0*,\d|\d,(?:\d{1,2}|\d{4,})(?!\d)|\d{4,},\d|,\d+[eE]")
_DELIMITER_NAMES = {
    "\t": "tabs", ";": "semicolons", "|": "bars", ",": "commas", " ": "blanks",
}  # fmt: skip


@dataclass(frozen=True)
class Layout:
    """Line numbers count from 1; ``header`` and ``units_row`` are cells, ``first`` the first row of data.

    ``width`` leaves out columns at the end that have neither a name nor a value; ``units_row`` has as many cells.
    """

    delimiter: str
    decimal: str
    width: int
    header: tuple[str, ...]
    units_line: int
    units_row: tuple[str, ...]
    first: int
    preamble: tuple[tuple[int, str], ...]
    notes: tuple[str, ...]


def split_line(line: str, delimiter: str, number: int) -> list[str]:
    """Stripped cells of one line; quoted cells may hold the delimiter."""
    if '"' not in line:
        cells = line.split() if delimiter == " " else line.split(delimiter)
        return [cell.strip() for cell in cells]
    try:
        text = " ".join(line.split()) if delimiter == " " else line
        rows = list(csv.reader([text], delimiter=delimiter, skipinitialspace=True, strict=True))
    except csv.Error as error:
        problem = Problem(
            f"quotation marks do not match ({error})", line=number, cure='"..." around whole cells'
        )
        raise InvalidInput(problem) from error
    return [cell.strip() for cell in rows[0]] if rows else []


def find_layout(lines: Sequence[str], options: ReadingOptions) -> Layout:
    """Layout of the text.

    Raises
    ------
    InvalidInput
        when no delimiter gives a table, the decimal sign can be read in two ways, or there is no header.
    """
    for number, line in enumerate(lines, start=1):
        if len(line) > MAX_LINE:
            raise InvalidInput(
                Problem("the line is too long", line=number, cure=f"at most {MAX_LINE} characters")
            )
    notes: list[str] = []
    stated = None
    first_line = next((i for i, line in enumerate(lines) if line.strip()), 0)
    separator = re.fullmatch(r'"?sep=(.)"?', lines[first_line].strip(" "), re.IGNORECASE)
    if separator and separator[1] in _DELIMITER_NAMES:
        stated = separator[1]
        notes.append(f"line {first_line + 1} states the delimiter")
    if options.delimiter is not None:
        stated = DELIMITERS[options.delimiter]
    skipped = {first_line + 1} if separator else set()
    sample = _sample(lines, options, skipped)
    delimiter, decimal, width, most = _best_pair(sample, stated, options)
    if width > MAX_COLUMNS:
        raise InvalidInput(f"the table has {width} columns", cure=f"at most {MAX_COLUMNS}")
    search = _Search(lines, options, delimiter, decimal, (width, most), skipped)
    header_line, header, units_line, units_row, first = search.header()
    named = without_empty_end(header)
    if len(named) <= search.most or (options.header_line and options.columns is None):
        width = max(width, len(named))  # columns that have a name, but no value in any row
    if options.columns is not None and len(options.columns) <= most:
        width = max(width, len(options.columns))
    units_row = [*units_row, *[""] * width][:width]
    if decimal == ",":
        _refuse_thousands(lines, first, delimiter, options)
    preamble = tuple(
        (n, lines[n - 1])
        for n in range(1, first)
        if n not in (header_line, units_line) and n not in skipped and lines[n - 1].strip()
    )
    notes += _describe(delimiter, decimal, header_line, units_line)
    return Layout(
        delimiter, decimal, width, tuple(header[:width]), units_line, tuple(units_row), first, preamble,
        tuple(notes),
    )  # fmt: skip


def without_empty_end(cells: Sequence[str]) -> Sequence[str]:
    """The cells up to the last that is not empty; spreadsheets write empty columns behind the table."""
    end = len(cells)
    while end and cells[end - 1] == "":
        end -= 1
    return cells[:end]


def is_comment(line: str, options: ReadingOptions, delimiter: str | None) -> bool:
    """Whether a stripped line is a comment; ';' begins one only where it is not the delimiter."""
    if line.startswith(options.comment_prefixes):
        return True
    return line.startswith(";") and delimiter not in (None, ";")


def _sample(lines: Sequence[str], options: ReadingOptions, skipped: set[int]) -> list[tuple[int, str]]:
    """Head and later lines, without blank lines and comments, numbered."""
    step = max(1, (len(lines) - 2 * SAMPLE) // SAMPLE)
    sample = []
    for part in (range(min(2 * SAMPLE, len(lines))), range(2 * SAMPLE, len(lines), step)):
        characters = 0
        for i in part:
            line = lines[i].strip()
            if line and i + 1 not in skipped and not is_comment(line, options, None):
                sample.append((i + 1, lines[i]))
                characters += len(line)
            if characters > SAMPLE_CHARACTERS:
                break
    return sample


def _best_pair(
    sample: list[tuple[int, str]], stated: str | None, options: ReadingOptions
) -> tuple[str, str, int, int]:
    """Delimiter, decimal sign, number of columns, and the most cells that such a row has with an empty end."""
    best: tuple[int, int, int] = (0, 0, 0)
    found: tuple[str, str, int, int] | None = None
    for delimiter in [stated] if stated else list(_DELIMITER_NAMES):
        for decimal in [options.decimal] if options.decimal else [".", ","]:
            score, most = _score(sample, delimiter, decimal)
            if score > best:
                best, found = score, (delimiter, decimal, score[2], most)
    if found is None:
        raise InvalidInput(
            "no rows of numbers were found",
            cure="columns separated by tabs, semicolons, bars, commas or blanks, under a header line; "
            "or state the options delimiter and decimal",
        )
    return found


def _score(sample: list[tuple[int, str]], delimiter: str, decimal: str) -> tuple[tuple[int, int, int], int]:
    """(rows fully understood, rows half understood, the width of most such rows), and their most cells."""
    full: Counter[int] = Counter()
    half: Counter[int] = Counter()
    most: Counter[int] = Counter()
    for number, line in sample:
        if delimiter not in line.strip():
            continue
        try:
            cells = split_line(line, delimiter, number)
        except InvalidInput:
            continue
        if delimiter == "," and decimal == "," and '"' not in line:
            continue  # decimal commas between commas are readable only inside quotation marks
        written = len(cells)
        # empty cells at the end: none of the table, or missing values, which other rows tell
        cells = [*without_empty_end(cells), "", ""][: max(2, len(without_empty_end(cells)))]
        known = [looks_like_value(cell, decimal) for cell in cells]
        numbers = sum(is_number(cell, decimal) for cell in cells)
        if written < 2 or not numbers:
            continue
        for width in range(len(cells), written + 1):
            full[width] += all(known)
            half[width] += 2 * sum(known) >= len(cells)
            most[width] = max(most[width], written)
    width = max(half, key=lambda w: (full[w], half[w], -w), default=0)
    if half[width] == 0:
        return (0, 0, 0), 0
    return (full[width], half[width], width), most[width]


def _refuse_thousands(lines: Sequence[str], first: int, delimiter: str, options: ReadingOptions) -> None:
    """'1,234' in every cell can be 1.234 or 1234: only another cell can tell."""
    if options.decimal is not None:
        return
    doubtful: tuple[int, str] | None = None
    for number in range(first, len(lines) + 1):
        line = lines[number - 1]
        if "," not in line or is_comment(line.strip(), options, delimiter):
            continue
        both = re.search(r"\d{1,3}(?:,\d{3}\.|\.\d{3},)\d*", line)
        if both:
            message = f"'{both.group()}' has thousands separators"
            raise InvalidInput(Problem(message, line=number, cure="export the numbers without them"))
        if _BELOW_ONE_OR_ODD.search(line):
            return
        if doubtful is None:
            cells = [c for c in split_line(line, delimiter, number) if re.fullmatch(r"[+-]?\d{1,3},\d{3}", c)]
            doubtful = (number, cells[0]) if cells else None
    if doubtful is None:
        return
    message = (
        f"'{doubtful[1]}' can be a decimal comma or a thousands separator, and no other cell tells which"
    )
    cure = "state the option decimal: ',' if it is a decimal comma; else export without thousands separators"
    raise InvalidInput(Problem(message, line=doubtful[0], field="decimal", cure=cure))


class _Search:
    """The search for header, units row and first row of data."""

    def __init__(
        self, lines: Sequence[str], options: ReadingOptions, delimiter: str, decimal: str,
        widths: tuple[int, int], skipped: set[int],
    ) -> None:  # fmt: skip
        self.lines, self.options, self.skipped = lines, options, skipped
        self.delimiter, self.decimal, self.width = delimiter, decimal, widths[0]
        self.most = max(widths[1], self.width + 1)  # cells that a header or a units row may have

    def header(self) -> tuple[int, list[str], int, list[str], int]:
        """Header's line (0: none), its cells, the units row's line and cells, and the first line of data."""
        if self.options.header_line == 0:
            return self._below(0, list(self.options.columns or ()))
        if self.options.header_line is not None:
            number = self.options.header_line
            if number > len(self.lines):
                message = f"the file has {len(self.lines)} lines, no line {number}"
                raise InvalidInput(message, field="header_line")
            return self._below(number, self._cells(number, header=True))
        named: tuple[int, list[str]] | None = None
        fallback: tuple[int, list[str]] | None = None
        seen = 0
        for number in range(1, min(len(self.lines), HEADER_SEARCH) + 1):
            line = self.lines[number - 1].strip()
            if not line or number in self.skipped:
                continue
            cells = self._cells(number, header=True)
            seen += len(cells)
            if seen > HEADER_CELLS:
                break
            if not is_comment(line, self.options, self.delimiter):
                if self._is_header(cells):
                    found = self._below(number, cells)
                    if self._is_data(found[-1]):
                        return found
                    named = named or (number, cells)
                elif self._is_data(number):
                    break
                elif not _RULE.fullmatch(line) and not (fallback and is_units_row(cells)):
                    fallback = (number, cells)
            elif self._is_header(cells) and self._is_data(self._next(number)):
                return self._below(number, cells)  # a header behind a comment sign
        if named is not None:
            return self._below(*named)
        if fallback is None:
            message = "no header line with the names of the columns was found"
            cure = "a header such as 't / min'; or state the options header_line and columns"
            raise InvalidInput(Problem(message, line=1, field="header_line", cure=cure))
        return self._below(*fallback)

    def _below(self, number: int, header: list[str]) -> tuple[int, list[str], int, list[str], int]:
        following = self._next(number)
        units_line, units_row = 0, [""] * len(header)
        while following <= len(self.lines):
            cells = self._cells(following, header=True)
            if not units_line and self._is_units_below(number, header, following, cells):
                units_line, units_row = following, cells
            elif not _RULE.fullmatch(self.lines[following - 1]):
                break
            following = self._next(following)
        return number, header, units_line, units_row, following

    def _is_units_below(self, number: int, header: list[str], following: int, cells: list[str]) -> bool:
        """Whether a line below the header holds the units, of which some may be unknown.

        Raises
        ------
        InvalidInput
            when names and units above it could as well be a heading and it the header.
        """
        if not self._fits(cells):
            return False
        if is_units_row(cells):
            return True
        if any(looks_like_value(c, self.decimal) and unit_of_cell(c) is None for c in cells):
            return False
        times = [(h, c) for h, c in zip(map(parse_header, header), cells, strict=False) if h.is_time]
        known = has_unit_of_signal(cells)
        above = any(
            (h.unit or h.clock) and unit_of_cell(c) == "" for h, c in times
        )  # the time's unit is there
        if not any(is_time_unit(c) for _, c in times) and not (above and known):
            return False
        stated = self.options.header_line is not None or self.options.columns is not None
        if stated or known or not self._is_data(self._next(following)):
            return True
        message = f"lines {number} and {following} can both be the header"
        cure = f"state the option header_line: {number} if line {following} holds units, else {following}"
        raise InvalidInput(Problem(message, line=following, field="header_line", cure=cure))

    def _next(self, number: int) -> int:
        """Number of the next line that is no comment and not blank; past the end when there is none."""
        for candidate in range(number + 1, len(self.lines) + 1):
            line = self.lines[candidate - 1].strip()
            if line and candidate not in self.skipped and not is_comment(line, self.options, self.delimiter):
                return candidate
        return len(self.lines) + 1

    def _cells(self, number: int, *, header: bool = False) -> list[str]:
        line = self.lines[number - 1]
        if header:
            for prefix in self.options.comment_prefixes:
                line = line.strip(" ").removeprefix(prefix)
        try:
            cells = split_line(line, self.delimiter, number)
        except InvalidInput:
            return [line]
        if header and self.delimiter == " " and len(cells) != self.width:
            # 't / min   A / mM': names hold single blanks, columns stand two or more apart
            cells = re.split(r" {2,}|\t", line.strip())
            if len(cells) != self.width:  # 't / s A (mM)': the unit belongs to the name before it
                cells = re.sub(r" +(?=[(\[/])|(?<=/) +", "", line.strip()).split()
        return cells

    def _fits(self, cells: list[str]) -> bool:
        return self.width <= len(cells) and len(without_empty_end(cells)) <= self.most

    def _is_header(self, cells: list[str]) -> bool:
        if not self._fits(cells):
            return False
        if self.options.time_column is not None:
            wanted = self.options.time_column
            return any(wanted in (cell, parse_header(cell).name) for cell in cells)
        headers = [parse_header(cell) for cell in cells]
        times = [h for h in headers if h.is_time]
        others = [c for c, h in zip(cells, headers, strict=True) if not h.is_time]
        if any(h.unit or h.clock for h in times):
            return True
        # 'Time; 12:30' above the header is an entry about the file, not a header
        return bool(times) and not all(looks_like_value(cell, self.decimal) for cell in others)

    def _is_data(self, number: int) -> bool:
        if number > len(self.lines):
            return False
        cells = self._cells(number)
        if len(cells) < self.width or any(cells[self.width :]):
            return False
        known = sum(looks_like_value(cell, self.decimal) for cell in cells)
        return known == len(cells) and any(is_number(cell, self.decimal) for cell in cells)


def _describe(delimiter: str, decimal: str, header_line: int, units_line: int) -> list[str]:
    notes = [f"columns are separated by {_DELIMITER_NAMES[delimiter]}"]
    notes.append(f"decimal sign: {'point' if decimal == '.' else 'comma'}")
    notes.append(f"line {header_line} is the header" if header_line else "no header; columns named as stated")
    if units_line:
        notes.append(f"line {units_line} holds the units")
    return notes
