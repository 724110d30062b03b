"""One attempt to read a held file as a form says: what was understood, or what is wrong and where."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from django.http import QueryDict

from kinetics_db.engine.reading import ReadingOptions, ReadResult
from kinetics_db.engine.reading.glimpse import column_names, raw_lines
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.measurements.services import preview_file
from kinetics_db.web.file_forms import OF_COLUMNS, ColumnRows, ReadingForm, initial_of
from kinetics_db.web.forms import problem_words
from kinetics_db.web.present.charts import Chart
from kinetics_db.web.present.tables import NumbersSheet, Span, signal_charts, signals_sheet, span_of

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User
    from kinetics_db.runs.models import Run

LONGEST_MESSAGE = 400
FIRST_ROWS, LAST_ROWS = 5, 3


@dataclass
class Attempt:
    """The form, the columns' rows, and what came of them.

    Attributes
    ----------
    result : what was understood, None until and unless it is
    problems : what is wrong with the file as a whole, in words
    wrong_lines : numbers of lines with something wrong
    lines : (number, text) of lines as they stand in the file
    """

    form: ReadingForm
    rows: ColumnRows
    earlier: Mapping[str, Any] = field(default_factory=dict)
    result: ReadResult | None = None
    problems: list[str] = field(default_factory=list)
    wrong_lines: set[int] = field(default_factory=set)
    lines: Sequence[tuple[int, str]] = ()

    @classmethod
    def with_options(cls, options: Mapping[str, Any], *, name: str) -> Attempt:
        """An attempt with stored options, or none."""
        return cls(ReadingForm(initial_of(options, name=name)), ColumnRows(), earlier=options)

    @classmethod
    def sent(cls, data: QueryDict, *, name: str | None = None) -> Attempt:
        """An attempt with the form that came in; ``name`` is that of a file chosen anew."""
        values = data.copy()
        if name is not None:
            values["name"] = name
        return cls(ReadingForm(values), ColumnRows.sent(data))

    @property
    def name(self) -> str:
        """The file's name as it stands in the form."""
        return str(self.form["name"].value() or "")

    def options(self, data: bytes) -> dict[str, Any] | None:
        """The reader's options that form and rows state; None when one of them is none, which is shown then."""
        if not self.form.is_valid():
            return None
        try:
            stated = self.form.stated()
            renamed = self.earlier.get("columns") or self.rows.stated().get("columns")
            known = {**stated, "columns": renamed} if renamed else stated
            names = column_names(data, ReadingOptions.from_plain(known))
        except InvalidInput as error:
            self.show(error)
            self.lines = raw_lines(data)
            return None
        if self.earlier:
            self.rows = ColumnRows.of_options(self.earlier, names)
        self.rows = self.rows.fitted(names)
        return {**stated, **self.rows.stated()}

    def read(self, *, user: User, run: Run, data: bytes) -> None:
        """Try it; stores nothing."""
        options = self.options(data)
        if options is None:
            return
        try:
            self.result = preview_file(user=user, run=run, data=data, options=options)
        except InvalidInput as error:
            self.show(error)
            encoding = options.get("encoding")
            self.lines = raw_lines(data, encoding, self.wrong_lines)
            return
        found = {column.name: column for column in self.result.table.columns}
        for row in self.rows.rows:
            if column := found.get(row.effective):
                row.unit_found, row.quantity = column.unit, column.quantity

    def show(self, error: InvalidInput) -> None:
        """Put each problem at its field, above the columns, or above the lines of the file."""
        for problem in error.problems:
            if problem.line is not None:
                self.wrong_lines.add(problem.line)
            short = _shortened(problem)
            if problem.field in OF_COLUMNS:
                self.rows.show(short)
            elif problem.field in self.form.fields:
                self.form.add_error(problem.field, problem_words(short))
            else:
                self.problems.append(problem_words(short))

    @property
    def is_wrong(self) -> bool:
        """Whether anything has to be corrected."""
        return self.result is None or bool(self.form.errors)

    @property
    def at_fields(self) -> list[tuple[str, str, str]]:
        """(id, label, words) of what is wrong at single fields."""
        return [
            (bound.id_for_label, str(bound.label), str(error))
            for bound in self.form
            for error in bound.errors
        ]

    @property
    def warnings(self) -> list[str]:
        """What a person should look at, in words."""
        return [problem_words(problem) for problem in self.result.warnings] if self.result else []

    @property
    def numbers(self) -> NumbersSheet | None:
        """The first and the last rows."""
        return signals_sheet(self.result.table, first=FIRST_ROWS, last=LAST_ROWS) if self.result else None

    @property
    def span(self) -> Span | None:
        """From when to when was measured."""
        return span_of(self.result.table) if self.result else None

    @property
    def charts(self) -> list[Chart]:
        """The signals over time."""
        return signal_charts(self.result.table, title="Signals") if self.result else []


def _shortened(problem: Problem) -> Problem:
    """A problem that repeats a very long text is cut: the text itself stands in its field."""

    def cut(text: str) -> str:
        return text if len(text) <= LONGEST_MESSAGE else text[: LONGEST_MESSAGE - 1] + "…"

    return replace(problem, message=cut(problem.message), cure=cut(problem.cure))
