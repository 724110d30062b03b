"""Choosing tables for a dataset: the name, the filter, and each table's window."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from django import forms
from django.http import QueryDict

from kinetics_db.datasets.services import Window
from kinetics_db.engine.shown_numbers import plain
from kinetics_db.errors import InvalidInput
from kinetics_db.web.forms import PlainForm, problem_words
from kinetics_db.web.present.units import factor, units_for
from kinetics_db.web.typed import number_or_none

if TYPE_CHECKING:
    from kinetics_db.measurements.models import ConcentrationTable

LONGEST_ID = 18
_OF_A_WINDOW = re.compile(r"t(\d+)-(?:start|end|leave)", re.ASCII)
_LEFT_OUT = re.compile(r"(?P<column>.+)@(?P<row>\d+|\*)\s*:(?P<reason>.*)", re.ASCII)


class DatasetForm(PlainForm):
    """The dataset's name and the runs that are looked through."""

    name = forms.CharField(
        required=False,
        label="Name of the dataset",
        help_text="The same name with another choice makes its next version.",
    )
    filter = forms.CharField(
        required=False,
        label="Runs to choose from",
        help_text="As on the list of runs, for example [A]0 50..150 mM, 40 degC, after 2026-03-01. Empty: all runs.",
    )
    every = forms.BooleanField(required=False, label="take every table that the filter finds, shown or not")
    tables = forms.CharField(required=False, widget=forms.MultipleHiddenInput)
    """Only bears what is wrong with the choice; the boxes are drawn row by row."""


class WindowForm(PlainForm):
    """Which part of a table counts; times in the unit that stands beside them."""

    start = forms.CharField(required=False, label="from", widget=forms.TextInput(attrs={"class": "short"}))
    end = forms.CharField(required=False, label="to", widget=forms.TextInput(attrs={"class": "short"}))
    leave = forms.CharField(
        required=False,
        label="points to leave out",
        widget=forms.Textarea(attrs={"rows": 2, "spellcheck": "false", "placeholder": "column@row: reason"}),
    )

    def window(self, unit: str) -> Window | None:
        """The window as typed, in s; None where all of the table counts or something cannot be read."""
        start, end, left_out = self._time("start", unit), self._time("end", unit), self._left_out()
        if self.errors or (start is None and end is None and not left_out):
            return None
        return Window(start=start, end=end, left_out=left_out)

    def _time(self, name: str, unit: str) -> float | None:
        try:
            number = number_or_none(self.cleaned_data.get(name, ""), field=name)
        except InvalidInput as error:
            self.add_error(name, problem_words(error.problems[0]))
            return None
        return None if number is None else number * factor(unit, "s")

    def _left_out(self) -> dict[str, str]:
        found = {}
        for number, line in enumerate(self.cleaned_data.get("leave", "").splitlines(), start=1):
            if not line.strip():
                continue
            read = _LEFT_OUT.fullmatch(line.strip())
            if read is None:
                self.add_error("leave", f"Line {number}: write column@row: reason, such as A@3: air bubble")
                continue
            found[f"{read['column'].strip()}@{read['row']}"] = read["reason"].strip()
        return found


@dataclass
class TableRow:
    """One table to choose, with its window and what is wrong with it."""

    table: ConcentrationTable
    chosen: bool
    window: WindowForm
    problems: list[str] = field(default_factory=list)

    @property
    def unit(self) -> str:
        """The unit of time in which the table reads well."""
        return units_for(concentrations=(), durations=[self.table.last_time or 0.0]).time

    @property
    def span(self) -> str:
        """From when to when the table goes."""
        if self.table.first_time is None or self.table.last_time is None:
            return plain(None)
        scale = factor("s", self.unit)
        ends = (plain(t * scale) for t in (self.table.first_time, self.table.last_time))
        return " to ".join(ends)

    @property
    def is_open(self) -> bool:
        """Whether the window is to be unfolded."""
        return bool(self.problems or self.window.errors) or any(
            self.window[name].value() for name in self.window.fields
        )


def table_rows(
    tables: Sequence[ConcentrationTable], *, chosen: Sequence[int], data: QueryDict | None
) -> list[TableRow]:
    """Rows of tables with the fields that belong to each."""
    marked = set(chosen)
    return [TableRow(table, table.pk in marked, WindowForm(data, prefix=f"t{table.pk}")) for table in tables]


def typed_for(data: QueryDict) -> list[int]:
    """Ids of the tables for which a window was typed."""
    typed = (_OF_A_WINDOW.fullmatch(name) for name, text in data.items() if str(text).strip())
    return numbers_in([found[1] for found in typed if found])


def numbers_in(texts: Sequence[str]) -> list[int]:
    """Ids among the texts; others cannot come from the page."""
    return [int(text) for text in texts if text.isascii() and text.isdecimal() and len(text) <= LONGEST_ID]
