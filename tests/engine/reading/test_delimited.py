"""Messy exports that must be read, and what is said about them."""

import math

import numpy as np
import pytest

from kinetics_db.engine.reading import ReadingOptions, ReadResult, read
from kinetics_db.engine.tables import Table
from kinetics_db.errors import InvalidInput


def read_text(text: str, encoding: str = "utf-8", **options: object) -> ReadResult:
    return read(text.encode(encoding), options=ReadingOptions(**options))  # type: ignore[arg-type]


def columns(table: Table) -> list[tuple[str, str]]:
    return [(c.name, c.unit) for c in table.columns]


def said(result: ReadResult, words: str) -> bool:
    return any(words in note for note in result.notes)


GOOD = [[0.0, 1.0, 0.5], [90.0, 0.8, 0.625]]


@pytest.mark.parametrize(
    "text",
    [
        "t / min,A / a.u.,B / a.u.\n0,1.0,0.5\n1.5,0.8,0.625\n",
        "t / min;A / a.u.;B / a.u.\n0;1,0;0,5\n1,5;0,8;0,625\n",
        "t / min\tA / a.u.\tB / a.u.\n0\t1,0\t0,5\n1,5\t0,8\t0,625\n",
        "t / min|A / a.u.|B / a.u.\n---|---|---\n0|1.0|0.5\n1.5|0.8|0.625\n",
        "t / min   A / a.u.   B / a.u.\n  0       1.0        0.5\n  1.5     0.8        0.625\n",
        "t/min A/a.u. B/a.u.\n0 1.0 0.5\n1.5 0.8 0.625\n",
        "t / min A (a.u.) B [a.u.]\n0 1.0 0.5\n1.5 0.8 0.625\n",
        '"t / min","A / a.u.","B / a.u."\n"0","1.0","0.5"\n"1.5","0.8","0.625"\n',
        '"t / min","A / a.u.","B / a.u."\n"0,0","1,0","0,5"\n"1,5","0,8","0,625"\n',
        "t; A; B\nmin; a.u.; a.u.\n0; 1,0; 0,5\n1,5; 0,8; 0,625\n",
        "t; A; B\n[min]; [a.u.]; [a.u.]\n0; 1,0; 0,5\n1,5; 0,8; 0,625\n",
        "t / min;A / a.u.;B / a.u.;\n0;1,0;0,5;\n1,5;0,8;0,625;\n",
        "# t / min\tA / a.u.\tB / a.u.\n0\t1.0\t0.5\n1.5\t0.8\t0.625\n",
        "sep=;\nt / min;A / a.u.;B / a.u.\n0;1;0.5\n1.5;0.8;0.625\n",
        "t / min;A / a.u.;B / a.u.\n0;1.0e0;5E-1\n90 s;8e-1;.625\n",
        "t / s;A / a.u.;B / a.u.\n0;1.0;0.5\n1:30;0.8;0.625\n",
        "t;A / a.u.;B / a.u.\n0:00:00;1.0;0.5\n0:01:30;0.8;0.625\n",
        "t / min;A / a.u.;B / a.u.\n\n0;1.0;0.5\n\n1.5;0.8;0.625\n;;\n;;\n\n",
        "t / min;A / a.u.;B / a.u.\n0;+1.0;0.5\n1.5;0.8;0.625",
    ],
)
def test_one_table_in_many_writings(text: str) -> None:
    for ends in ("\n", "\r\n", "\r"):
        result = read_text(text.replace("\n", ends))
        assert columns(result.table) == [("t", "s"), ("A", "a.u."), ("B", "a.u.")]
        assert result.table.values.tolist() == GOOD


@pytest.mark.parametrize(
    ("encoding", "note"),
    [
        ("utf-8", "UTF-8"),
        ("utf-8-sig", "UTF-8 with a byte order mark"),
        ("utf-16", "UTF-16 with a byte order mark"),
        ("utf-16-le", "UTF-16-LE without a byte order mark"),
        ("utf-16-be", "UTF-16-BE without a byte order mark"),
        ("cp1252", "Windows-1252, since it is not UTF-8 (first seen at 'µ' in line 1)"),
    ],
)
def test_encodings_are_found_and_noted(encoding: str, note: str) -> None:
    result = read_text("t / min;A / µM;T / °C\n0;1,5;25,0\n", encoding)
    assert columns(result.table) == [("t", "s"), ("A", "µM"), ("T", "°C")]
    assert result.notes[0].startswith(f"text encoding: {note}")


def test_an_encoding_can_be_stated() -> None:
    data = "t / min;A / µM\n0;1,5\n".encode("mac-roman")
    result = read(data, options=ReadingOptions(encoding="mac-roman"))
    assert columns(result.table)[1] == ("A", "µM")


def test_everything_that_was_understood_is_said_in_plain_words() -> None:
    text = "Sample: 7\nt / min;A / a.u.;B / a.u.\n0;1,0;n.d.\n1,5;0,8;0,625\n"
    assert read_text(text).notes == (
        "text encoding: plain ASCII",
        "columns are separated by semicolons",
        "decimal sign: comma",
        "line 2 is the header",
        "time is column 't', its numbers in min, converted to s",
        "2 signals: A (a.u.), B (a.u.)",
        "2 rows, lines 3 to 4",
        "1 cell missing: line 3 'B' ('n.d.')",
    )


def test_comments_and_lines_above_the_header_become_metadata() -> None:
    text = (
        "# Sample: lactone 7\n% solvent = D2O\n// made by hand\nOperator;N. N.\nTemperature / °C;25\nTime;12:30\n\n"
        "t / s;A / mM\n0;1\n# lamp on\n10;2\n; end of run\n"
    )
    result = read_text(text.replace("; end of run\n", ""))
    assert result.table.values.tolist() == [[0.0, 1.0], [10.0, 2.0]]
    assert result.metadata == (
        ("Sample", "lactone 7"),
        ("solvent", "D2O"),
        ("line 3", "made by hand"),
        ("Operator", "N. N."),
        ("Temperature / °C", "25"),
        ("Time", "12:30"),
        ("line 10", "lamp on"),
    )


def test_a_semicolon_begins_a_comment_only_where_it_is_not_the_delimiter() -> None:
    result = read_text("; made today\nt / s,A\n0,1\n; pause\n1,2\n")
    assert result.table.rows == 2
    assert result.metadata == (("line 1", "made today"), ("line 4", "pause"))


@pytest.mark.parametrize(
    "cell", ["", "-", "--", "---", "n/a", "N/A", "NA", "NaN", "nan", "nd", "n.d.", "N.D.", "null"]
)
def test_missing_cells_are_missing_and_noted(cell: str) -> None:
    result = read_text(f"t / s;A;B\n0;{cell};1\n1;2;3\n")
    assert math.isnan(result.table.values[0, 1])
    assert result.table.values[1].tolist() == [1.0, 2.0, 3.0]
    assert said(result, "1 cell missing: line 2 'A'")


def test_a_value_below_the_detection_limit_is_missing_with_a_warning() -> None:
    result = read_text("t / s;A\n0;1,5\n1;<0,02\n2;≤ 0,02\n")
    assert np.isnan(result.table.values[1:, 1]).all()
    assert said(result, "2 cells beyond a detection limit, taken as missing")
    assert [(w.line, w.severity) for w in result.warnings] == [(3, "warning"), (4, "warning")]


def test_a_column_without_any_value_is_kept_with_a_warning() -> None:
    result = read_text("t / s;A;B\n0;1;\n1;2;\n")
    assert columns(result.table) == [("t", "s"), ("A", ""), ("B", "")]
    assert [w.field for w in result.warnings] == ["B"]


def test_minutes_seconds_and_clock_times_mixed_in_one_column() -> None:
    text = "time;A\n0;1\n90 s;2\n2.5 min;3\n4:30;4\n0:10:00;5\n0.5 h;6\n"
    result = read_text(text)
    assert result.table.times.tolist() == [0.0, 90.0, 150.0, 270.0, 600.0, 1800.0]
    assert said(result, "every cell carries its own unit or colons")


def test_clock_times_follow_the_form_in_the_header() -> None:
    assert read_text("Time (h:mm);A\n0:00;1\n1:30;2\n").table.times.tolist() == [0.0, 5400.0]
    assert read_text("Time (mm:ss);A\n0:00;1\n1:30.5;2\n").table.times.tolist() == [0.0, 90.5]
    assert read_text("Time (mm:ss);A\n-0:30;1\n0:30;2\n").table.times.tolist() == [-30.0, 30.0]


@pytest.mark.parametrize(
    ("text", "times", "told_by"),
    [
        ("59:30;1\n1:00:00;2\n1:00:30;3", [3570, 3600, 3630], "mm:ss: as h:mm the rows would not be in"),
        ("0:30;1\n45 min;2\n1:00;3", [1800, 2700, 3600], "h:mm: as mm:ss the rows would not be in"),
        ("10:00,5;1\n10:05,0;2", [600.5, 605], "mm:ss: some have fractions of a second"),
        ("0:00;1\n30 s;2", [0, 30], "every cell carries its own unit or colons"),  # zero needs no form
    ],
)
def test_other_cells_tell_what_a_time_with_one_colon_is(text: str, times: list[float], told_by: str) -> None:
    result = read_text(f"time;A\n{text}\n")
    assert result.table.times.tolist() == times
    assert said(result, told_by)


@pytest.mark.parametrize("rows", ["10:00;1\n10:05;2", "0:30;1\n45 min;2\n1:00;3"])
def test_times_with_one_colon_that_can_be_both_need_their_form_stated(rows: str) -> None:
    text = f"time;A\n{rows}\n"
    with pytest.raises(InvalidInput, match="can be h:mm or mm:ss") as caught:
        read_text(text, sort_times=True)  # the order of rows tells nothing where it may be wrong
    assert caught.value.problems[0].field == "time_format"
    assert "time_format" in caught.value.problems[0].cure
    hours = read_text(text, time_format="h:mm", sort_times=True).table
    minutes = read_text(text, time_format="mm:ss", sort_times=True).table
    assert hours.times.max() == 60 * minutes.times[minutes.times < 2000].max()


def test_a_stated_form_of_time_goes_over_header_and_unit() -> None:
    for header in ("time", "time (h:mm)", "t / h", "t / min"):
        text = f"{header};A\n0:10;1\n1:30;2\n"
        assert read_text(text, time_format="mm:ss").table.times.tolist() == [10.0, 90.0]
        assert read_text(text, time_format="h:mm").table.times.tolist() == [600.0, 5400.0]


def test_a_units_row_with_an_unknown_unit_leaves_the_names_in_place() -> None:
    text = "t;A;B\nmin;mM;arb\n0;1;2\n1;2;3\n"
    result = read_text(text)
    assert columns(result.table) == [("t", "s"), ("A", "mM"), ("B", "")]
    assert result.table.times.tolist() == [0.0, 60.0]
    assert [(w.line, w.column, w.field) for w in result.warnings] == [(2, 3, "units")]
    assert "'arb' is no unit that is known; column 'B' is read without it" in str(result.warnings[0])
    stated = read_text(text, units=(("B", "a.u."),))
    assert columns(stated.table)[2] == ("B", "a.u.")
    assert stated.warnings == ()


def test_unknown_units_are_seen_below_a_header_that_states_the_unit_of_time() -> None:
    result = read_text("t / min;A;pH\n;mM;pH\n0;1;7\n1;2;7\n")
    assert columns(result.table) == [("t", "s"), ("A", "mM"), ("pH", "")]


def test_a_bad_cell_below_unknown_units_is_what_is_refused() -> None:
    with pytest.raises(InvalidInput, match="line 3, column 3: 'abc' in column 'B' is not a number") as caught:
        read_text("t;A;B\nmin;mM;arb\n0;1;abc\n1;2;3\n")
    assert len(caught.value.problems) == 1


def test_names_or_units_below_a_heading_are_settled_by_the_line_of_the_header() -> None:
    text = "Time;Level;Area\nmin;lactone;acid\n0;1;2\n1;2;3\n"
    with pytest.raises(InvalidInput, match="lines 1 and 2 can both be the header") as caught:
        read_text(text)
    assert caught.value.problems[0].field == "header_line"
    assert read_text(text, header_line=1).table.names("signal") == ("Level", "Area")
    assert read_text(text, header_line=2).table.names("signal") == ("lactone", "acid")


@pytest.mark.parametrize(
    "text",
    [
        "t / s;A;;\n0;1,5;;\n1;2,5;;\n",
        "t / s;A;;;\n0;1,5\n1;2,5;\n",
        "t / s;A\n0;1,5;;\n1;2,5;;\n",
        "t;A;;\ns;;;\n0;1,5;;\n1;2,5;;\n",
        "Sample;7;;;\nT / °C;25,0;;;\n;;;;\nt / s;A;;;\n0;1,5;;;\n1;2,5;;;\n;;;;\n",
        "t / s,A,,\n0,1.5,,\n1,2.5,,\n",
        "t / s\tA\t\t\n0\t1.5\t\t\n1\t2.5\t\t\n",
        '"t / s","A","",""\n"0","1,5","",""\n"1","2,5","",""\n',
    ],
)
def test_empty_columns_at_the_end_are_left_out(text: str) -> None:
    result = read_text(text)
    assert columns(result.table) == [("t", "s"), ("A", "")]
    assert result.table.values.tolist() == [[0.0, 1.5], [1.0, 2.5]]
    assert said(result, "at the end of lines") and not result.warnings


def test_columns_at_the_end_that_have_a_name_or_a_value_are_kept() -> None:
    named = read_text("t / s;A;B;C;;\n0;1;;;;\n1;2;;;;\n")
    assert [name for name, _ in columns(named.table)] == ["t", "A", "B", "C"]
    assert [w.field for w in named.warnings] == ["B", "C"]
    late = read_text("t / s;A;B;C;\n0;1;;;\n1;2;;;\n2;3;;4;\n").table
    assert np.array_equal(late.column("C", "signal"), [np.nan, np.nan, 4.0], equal_nan=True)
    stated = read_text("t / s;A;;\n0;1;;\n1;2;;\n", columns=("t", "A", "x", "y"), ignored_columns=("x", "y"))
    assert columns(stated.table) == [("t", "s"), ("A", "")]


def test_a_name_more_than_there_are_columns_is_never_dropped() -> None:
    with pytest.raises(InvalidInput, match="the row has 2 cells instead of 5"):
        read_text("t / s;A;B;C;D\n0;1\n1;2\n", header_line=1)


def test_another_column_in_seconds_does_not_disturb_the_time_in_minutes() -> None:
    result = read_text("time / min;exposure / s;A\n0;5;1\n1;5;2\n")
    assert columns(result.table) == [("time", "s"), ("exposure", "s"), ("A", "")]
    assert result.table.times.tolist() == [0.0, 60.0]


@pytest.mark.parametrize("row", ["1;1", "90 s;1", "1;-", "5 s;2"])
def test_a_first_row_that_could_be_read_as_units_is_data(row: str) -> None:
    result = read_text(f"t / min;A\n{row}\n100;3\n")
    assert result.table.rows == 2
    assert columns(result.table) == [("t", "s"), ("A", "")]


def test_wavelengths_as_names_are_names() -> None:
    result = read_text("time/min;254;280\n0;0,1;0,2\n1;0,3;0,4\n")
    assert columns(result.table) == [("time", "s"), ("254", ""), ("280", "")]


def test_typographic_minus_signs_are_read_and_noted() -> None:
    result = read_text("t / s;A\n\u22121;\u22120.5\n0;1\n")
    assert result.table.values[0].tolist() == [-1.0, -0.5]
    assert said(result, "minus signs")


def test_statements_go_over_what_the_file_says() -> None:
    text = "x;y;z\n0;1;a\n1;2;b\n"
    result = read_text(
        text, time_column="x", time_unit="h", units=(("y", "mM"),), ignored_columns=("z",), header_line=1
    )
    assert columns(result.table) == [("x", "s"), ("y", "mM")]
    assert result.table.times.tolist() == [0.0, 3600.0]
    assert said(result, "not read, as stated: z")


def test_a_file_without_header_needs_names() -> None:
    result = read_text("0;1\n1;2\n", header_line=0, columns=("t", "A"), time_unit="min")
    assert columns(result.table) == [("t", "s"), ("A", "")]
    assert result.table.values.tolist() == [[0.0, 1.0], [60.0, 2.0]]


def test_double_names_can_be_replaced() -> None:
    text = "t / s;A;A\n0;1;2\n"
    with pytest.raises(InvalidInput, match="columns 2 and 3 are both called 'A'"):
        read_text(text)
    assert columns(read_text(text, columns=("t", "A1", "A2")).table) == [("t", "s"), ("A1", ""), ("A2", "")]


def test_rows_out_of_order_are_sorted_only_when_asked() -> None:
    text = "t / s;A\n0;1\n2;3\n1;2\n"
    with pytest.raises(InvalidInput, match="line 4: the time goes back to 1 s") as caught:
        read_text(text)
    assert "sort_times" in caught.value.problems[0].cure
    result = read_text(text, sort_times=True)
    assert result.table.values.tolist() == [[0.0, 1.0], [1.0, 2.0], [2.0, 3.0]]
    assert said(result, "rows are sorted by time, as asked (first out of order in line 4)")


@pytest.mark.parametrize("sort", [True, False])
def test_repeated_times_are_refused_with_both_lines(sort: bool) -> None:
    with pytest.raises(InvalidInput, match="line 4: the time 60 s stands in line 2 too"):
        read_text("t / min;A\n1;1\n2;3\n60 s;2\n", sort_times=sort)


@pytest.mark.parametrize(
    "text",
    ["t / s;A\n0;1,234\n10;1,100\n", "t / s\tA\n0\t12,345\n10\t11,100\n", "t / s;A\n0;1,234\n10;-1,100\n"],
)
def test_a_comma_that_could_separate_thousands_is_never_guessed(text: str) -> None:
    with pytest.raises(InvalidInput, match="decimal comma or a thousands separator") as caught:
        read_text(text)
    assert caught.value.problems[0].field == "decimal"
    assert caught.value.problems[0].line == 2
    assert read_text(text, decimal=",").table.values[0, 1] in (1.234, 12.345)


@pytest.mark.parametrize("other", ["0,123", "1,5", "1234,567", "1,234e-3"])
def test_one_cell_with_evidence_settles_the_decimal_comma(other: str) -> None:
    result = read_text(f"t / s;A\n0;1,234\n10;{other}\n")
    assert result.table.values[0, 1] == 1.234


@pytest.mark.parametrize("cell", ["1,234.5", "1.234,5", "12,345,678"])
def test_thousands_separators_are_refused_with_an_explanation(cell: str) -> None:
    with pytest.raises(InvalidInput, match="thousands"):
        read_text(f"t / s\tA\n0\t{cell}\n10\t1\n")


def test_the_options_survive_their_plain_form() -> None:
    options = ReadingOptions(
        decimal=",",
        units=(("A", "mM"),),
        columns=("t", "A"),
        sort_times=True,
        header_line=3,
        time_format="h:mm",
    )
    plain = options.to_plain()
    assert plain == {
        "decimal": ",", "units": {"A": "mM"}, "columns": ["t", "A"], "sort_times": True, "header_line": 3,
        "time_format": "h:mm",
    }  # fmt: skip
    assert ReadingOptions.from_plain(plain) == options
    assert ReadingOptions.from_plain({}) == ReadingOptions()


@pytest.mark.parametrize(
    ("plain", "field"),
    [
        ({"encoding": "zip"}, "encoding"),
        ({"delimiter": ";"}, "delimiter"),
        ({"decimal": "'"}, "decimal"),
        ({"header_line": -1}, "header_line"),
        ({"header_line": "3"}, "header_line"),
        ({"time_unit": "mM"}, "time_unit"),
        ({"time_format": "hh.mm"}, "time_format"),
        ({"time_format": 5}, "time_format"),
        ({"units": {"A": "blobs"}}, "units"),
        ({"units": [1]}, "units"),
        ({"columns": "t"}, "columns"),
        ({"comment_prefixes": [""]}, "comment_prefixes"),
        ({"sort_times": 1}, "sort_times"),
        ({"colour": "red"}, "colour"),
    ],
)
def test_options_without_sense_are_refused_with_the_field(plain: dict[str, object], field: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        ReadingOptions.from_plain(plain)
    assert caught.value.problems[0].field == field


def test_an_unknown_reader_is_refused_with_the_known_ones() -> None:
    with pytest.raises(InvalidInput, match="delimited text"):
        read(b"", reader="tea leaves")
