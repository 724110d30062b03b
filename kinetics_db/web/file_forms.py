"""The form in which a person says how a file is to be read, and how it turns into the reader's options."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from django import forms
from django.http import QueryDict

from kinetics_db.engine.reading.options import DELIMITERS, ENCODINGS, TIME_FORMATS, ReadingOptions
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.web.forms import PlainForm, problem_words

FIND_OUT = ("", "find it out")
MARKS = " ".join(ReadingOptions().comment_prefixes)
MOST_ROWS = 100
"""Columns beyond this have no row of their own in the form; they are read as the file has them."""
OF_COLUMNS = ("columns", "units", "ignored_columns")
_WHOLE = re.compile(r"\d{1,9}", re.ASCII)


def _choices(values: Sequence[str], words: Mapping[str, str] | None = None) -> list[tuple[str, str]]:
    return [FIND_OUT, *((value, (words or {}).get(value, value)) for value in values)]


class UploadForm(PlainForm):
    """The file itself. What may come in is the service's to say."""

    file = forms.FileField(
        label="Instrument file",
        required=False,
        allow_empty_file=True,
        max_length=None,
        help_text="A table as text: CSV, tab-separated or the like. You see what was understood before it is stored.",
    )


class _Choice(forms.ChoiceField):
    """A select whose unknown values are left to the service, which says what it would take."""

    def valid_value(self, value: object) -> bool:
        return True


class ReadingForm(PlainForm):
    """Statements about a delimited text file; what is left open is found out."""

    name = forms.CharField(label="Name of the file", required=False)
    encoding = _Choice(label="Text encoding", required=False, choices=_choices(ENCODINGS))
    delimiter = _Choice(label="Columns are separated by", required=False, choices=_choices(list(DELIMITERS)))
    decimal = _Choice(
        label="Decimal sign", required=False, choices=_choices([".", ","], {".": "point", ",": "comma"})
    )
    header_line = forms.CharField(
        label="Header in line", required=False, help_text="A line number; 0 when there is no header."
    )
    comment_prefixes = forms.CharField(
        label="Marks of comment lines", required=False, help_text="With blanks between them."
    )
    time_column = forms.CharField(label="Time is column", required=False)
    time_unit = forms.CharField(label="Unit of time", required=False, help_text="s, min, h or d")
    time_format = _Choice(label="A time with one colon is", required=False, choices=_choices(TIME_FORMATS))
    sort_times = forms.BooleanField(label="Put rows in the order of time", required=False)

    def __init__(self, *args: Any, **kwargs: Any):
        super().__init__(*args, **kwargs)
        for short in ("header_line", "time_unit", "comment_prefixes"):
            self.fields[short].widget.attrs["class"] = "short"
        self.fields["time_column"].widget.attrs["list"] = "columns-of-file"
        self.fields["time_unit"].widget.attrs["list"] = "units-of-time"
        for text in ("name", "header_line", "comment_prefixes", "time_column", "time_unit"):
            self.fields[text].widget.attrs["autocomplete"] = "off"

    def stated(self) -> dict[str, Any]:
        """The options that this form states; InvalidInput for a line number that is none."""
        found: dict[str, Any] = {
            name: self.cleaned_data[name]
            for name in ("encoding", "delimiter", "decimal", "time_column", "time_unit", "time_format")
            if self.cleaned_data[name]
        }
        marks = tuple(self.cleaned_data["comment_prefixes"].split())
        if marks != ReadingOptions().comment_prefixes:
            found["comment_prefixes"] = list(marks)
        if self.cleaned_data["sort_times"]:
            found["sort_times"] = True
        if line := self.cleaned_data["header_line"].strip():
            if not _WHOLE.fullmatch(line):
                raise InvalidInput(
                    f"'{line[:20]}' is no line number",
                    field="header_line",
                    cure="1, 2 and so on; 0 for no header",
                )
            found["header_line"] = int(line)
        return found


def initial_of(options: Mapping[str, Any], *, name: str) -> dict[str, Any]:
    """What the form shows for stored options."""
    return {
        "name": name,
        **{
            key: options.get(key, "")
            for key in ("encoding", "delimiter", "decimal", "time_column", "time_unit")
        },
        "time_format": options.get("time_format", ""),
        "header_line": str(options.get("header_line", "")),
        "comment_prefixes": " ".join(options.get("comment_prefixes", MARKS.split())),
        "sort_times": options.get("sort_times", False),
    }


@dataclass
class ColumnRow:
    """One column of the file in the form: its name there, and what is stated instead.

    ``unit_found`` is the unit that was understood, to be shown beside an empty field.
    """

    found: str
    name: str = ""
    unit: str = ""
    left_out: bool = False
    unit_found: str = ""
    quantity: str = ""

    @property
    def effective(self) -> str:
        """The name by which other options call the column."""
        return self.name or self.found

    @property
    def says_something(self) -> bool:
        """Whether anything is stated here."""
        return bool(self.name or self.unit or self.left_out)


@dataclass
class ColumnRows:
    """The rows of all columns; ``spare`` are those sent for columns that the file does not have as it is read now."""

    rows: list[ColumnRow] = field(default_factory=list)
    spare: list[ColumnRow] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)

    @classmethod
    def sent(cls, data: QueryDict) -> ColumnRows:
        """The rows of a form that came in."""
        rows = []
        for number in range(MOST_ROWS):
            found = data.get(f"column-{number}-found")
            if found is None:
                break
            name, unit = (data.get(f"column-{number}-{part}", "").strip() for part in ("name", "unit"))
            rows.append(ColumnRow(found, name, unit, f"column-{number}-out" in data))
        return cls(rows)

    @classmethod
    def of_options(cls, options: Mapping[str, Any], names: Sequence[str]) -> ColumnRows:
        """The rows for stored options and a file with columns of these names."""
        stated = options.get("columns") or []
        rows = []
        for position, found in enumerate(names):
            row = ColumnRow(found, stated[position] if position < len(stated) else "")
            row.name = "" if row.name == found else row.name
            row.unit = options.get("units", {}).get(row.effective, "")
            row.left_out = row.effective in options.get("ignored_columns", ())
            rows.append(row)
        return cls(rows)

    def fitted(self, names: Sequence[str]) -> ColumnRows:
        """These rows for the columns that the file has now; as they are where none were found."""
        if not names:
            return self
        left = list(self.rows)
        rows = []
        for position, name in enumerate(names):
            same = [row for row in left if row.found == name]
            if position < len(self.rows) and self.rows[position] in same:
                same.insert(0, self.rows[position])
            chosen = same[0] if same else ColumnRow(name)
            left = [row for row in left if row is not chosen]
            rows.append(chosen)
        return ColumnRows(rows, [row for row in left if row.says_something])

    def stated(self) -> dict[str, Any]:
        """The options that the rows state."""
        found: dict[str, Any] = {}
        if any(row.name for row in self.rows):
            found["columns"] = [row.effective for row in self.rows]
        if units := {row.effective: row.unit for row in self.rows if row.unit}:
            found["units"] = units
        if left_out := [row.effective for row in self.rows if row.left_out]:
            found["ignored_columns"] = left_out
        return found

    def show(self, problem: Problem) -> None:
        """Put a problem above the rows."""
        self.problems.append(problem_words(problem))

    @property
    def shown(self) -> list[tuple[int, ColumnRow]]:
        """Rows to be shown, numbered from 0."""
        return list(enumerate(self.rows[:MOST_ROWS]))

    @property
    def hidden(self) -> list[tuple[int, ColumnRow]]:
        """Spare rows, to be sent along, numbered after those shown."""
        first = len(self.rows)
        return list(enumerate(self.spare, start=first))[: max(0, MOST_ROWS - first)]

    @property
    def more(self) -> int:
        """Columns without a row."""
        return max(0, len(self.rows) - MOST_ROWS)
