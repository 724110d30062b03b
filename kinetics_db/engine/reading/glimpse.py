"""What can be shown of a file, also of one that cannot be read: its columns' names and its lines as they stand."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import replace

from kinetics_db.engine.reading.decoding import lines_of
from kinetics_db.engine.reading.headers import parse_header
from kinetics_db.engine.reading.layout import find_layout
from kinetics_db.engine.reading.options import ReadingOptions
from kinetics_db.errors import InvalidInput

FIRST_LINES = 8
AROUND = 2
MOST_LINES = 40
LONGEST_LINE = 200
_UNSEEN = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff]")


def column_names(data: bytes, options: ReadingOptions) -> tuple[str, ...]:
    """Names of all columns as the file has them, '' for one without a name; () when no table was found in it.

    Names that the options state instead do not count here, nor units and columns that are left out.
    """
    plain = replace(options, columns=None, units=(), ignored_columns=(), time_column=None)
    for tried in (plain, options):
        try:
            lines, _ = lines_of(data, options.encoding)
            layout = find_layout(lines, tried)
        except InvalidInput:
            continue
        header = layout.header if options.header_line != 0 else ()
        names = [parse_header(cell).name for cell in header[: layout.width]]
        return tuple(names + [""] * (layout.width - len(names)))
    return ()


def raw_lines(
    data: bytes, encoding: str | None = None, around: Iterable[int] = ()
) -> tuple[tuple[int, str], ...]:
    """The first lines and those around the given ones, with their numbers from 1; signs that cannot be shown
    are replaced, and long lines cut."""
    text = _as_text(data, encoding).replace("\r\n", "\n").replace("\r", "\n")
    lines = text.removesuffix("\n").split("\n")
    wanted = set(range(1, FIRST_LINES + 1))
    for number in sorted(set(around)):
        if len(wanted) >= MOST_LINES:
            break
        wanted |= set(range(number - AROUND, number + AROUND + 1))
    return tuple((n, _shown(lines[n - 1])) for n in sorted(wanted) if 1 <= n <= len(lines))


def _as_text(data: bytes, encoding: str | None) -> str:
    try:
        return "\n".join(lines_of(data, encoding)[0])
    except InvalidInput:
        pass
    for name in (encoding or "utf-8", "cp1252"):
        try:
            return data.decode(name)
        except UnicodeDecodeError:
            continue
    return data.decode("latin-1")


def _shown(line: str) -> str:
    cut = line[:LONGEST_LINE] + ("…" if len(line) > LONGEST_LINE else "")
    return _UNSEEN.sub("\ufffd", cut)
