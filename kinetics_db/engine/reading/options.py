"""What a person states about a file instead of letting the reader find it out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

from kinetics_db.engine.units import is_unit, kind_of_unit
from kinetics_db.errors import InvalidInput, Problem

#: Encodings that may be stated. Python knows more, but some of those are slow or are no text encodings.
ENCODINGS = (
    "utf-8", "utf-16", "utf-16-le", "utf-16-be", "cp1252", "latin-1", "iso8859-15", "cp1250", "cp1251",
    "cp437", "cp850", "mac-roman", "shift_jis", "gb18030", "euc-kr", "big5",
)  # fmt: skip
#: Names of the delimiters that are understood.
DELIMITERS: Mapping[str, str] = {"tab": "\t", "semicolon": ";", "bar": "|", "comma": ",", "blanks": " "}
#: What a time with one colon can be.
TIME_FORMATS = ("mm:ss", "h:mm")


@dataclass(frozen=True)
class ReadingOptions:
    """Statements about a delimited text file; None means 'find it out'.

    Attributes
    ----------
    encoding : one of `ENCODINGS`
    delimiter : one of `DELIMITERS` by name
    decimal : '.' or ','
    comment_prefixes : beginnings of lines that are comments
    header_line : number of the line with the column names, from 1; 0 when there is none (then ``columns``
        names them)
    columns : names of all columns in order, instead of those in the header
    time_column : name of the time column
    time_unit : unit of the numbers in the time column, over that in the header
    time_format : what a time with one colon is, one of `TIME_FORMATS`, over the form in the header
    units : (column, unit) pairs, over those in the header
    ignored_columns : names of columns that are not read, such as remarks
    sort_times : put rows that are out of order in the order of time
    """

    encoding: str | None = None
    delimiter: str | None = None
    decimal: str | None = None
    comment_prefixes: tuple[str, ...] = ("#", "%", "//")
    header_line: int | None = None
    columns: tuple[str, ...] | None = None
    time_column: str | None = None
    time_unit: str | None = None
    time_format: str | None = None
    units: tuple[tuple[str, str], ...] = ()
    ignored_columns: tuple[str, ...] = ()
    sort_times: bool = False

    def __post_init__(self) -> None:
        problems = []

        def refuse(field: str, message: str, cure: str) -> None:
            problems.append(Problem(message, field=field, cure=cure))

        if self.encoding is not None and self.encoding not in ENCODINGS:
            refuse("encoding", f"unknown encoding {self.encoding!r}", "one of " + ", ".join(ENCODINGS))
        if self.delimiter is not None and self.delimiter not in DELIMITERS:
            refuse("delimiter", f"unknown delimiter {self.delimiter!r}", "one of " + ", ".join(DELIMITERS))
        if self.decimal not in (None, ".", ","):
            refuse("decimal", f"unknown decimal sign {self.decimal!r}", "'.' or ','")
        if any(not prefix for prefix in self.comment_prefixes):
            refuse("comment_prefixes", "an empty comment mark would match every line", "such as '#'")
        if self.header_line is not None and self.header_line < 0:
            refuse("header_line", f"line {self.header_line}", "a line number from 1, or 0 for no header")
        if self.time_unit is not None and not _is_time(self.time_unit):
            refuse("time_unit", f"{self.time_unit!r} is no unit of time", "s, min, h or d")
        if self.time_format not in (None, *TIME_FORMATS):
            refuse(
                "time_format",
                f"unknown form of time {self.time_format!r}",
                "one of " + ", ".join(TIME_FORMATS),
            )
        for name, unit in self.units:
            if unit and not is_unit(unit):
                refuse("units", f"unknown unit {unit!r} for column '{name}'", "for example mM, a.u., %")
        if problems:
            raise InvalidInput(problems)

    def to_plain(self) -> dict[str, Any]:
        """Plain values for the record; only what was stated."""
        plain: dict[str, Any] = {}
        for field in fields(self):
            value = getattr(self, field.name)
            if value != field.default:
                plain[field.name] = dict(value) if field.name == "units" else value
        return {k: list(v) if isinstance(v, tuple) else v for k, v in plain.items()}

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> ReadingOptions:
        """Inverse of `to_plain`; InvalidInput names an unknown or wrongly typed option."""
        known = {field.name for field in fields(cls)}
        values: dict[str, Any] = {}
        for name, value in plain.items():
            if name not in known:
                raise InvalidInput(
                    f"unknown option '{name}'", field=name, cure="one of " + ", ".join(sorted(known))
                )
            values[name] = _typed(name, value)
        return cls(**values)


def _is_time(unit: str) -> bool:
    return is_unit(unit) and kind_of_unit(unit) == "time"


def _typed(name: str, value: Any) -> Any:
    if value is None and name in ("encoding", "delimiter", "decimal", "header_line", "columns"):
        return None
    if value is None and name in ("time_column", "time_unit", "time_format"):
        return None
    if name == "sort_times" and isinstance(value, bool):
        return value
    if name == "header_line" and isinstance(value, int) and not isinstance(value, bool):
        return value
    if name == "units" and isinstance(value, Mapping):
        if all(isinstance(k, str) and isinstance(v, str) for k, v in value.items()):
            return tuple(value.items())
    elif name in ("columns", "comment_prefixes", "ignored_columns"):
        if isinstance(value, list | tuple) and all(isinstance(item, str) for item in value):
            return tuple(value)
    elif name not in ("sort_times", "header_line") and isinstance(value, str):
        return value
    raise InvalidInput(f"option '{name}' cannot be {value!r}", field=name, cure="a value of the right kind")
