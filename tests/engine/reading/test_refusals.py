"""Files that cannot be read: each refused with its place and a cure, in time, and never in another way."""

import random
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kinetics_db.engine.reading import ReadingOptions, ReadResult, layout, read
from kinetics_db.engine.reading.headers import parse_header
from kinetics_db.errors import InvalidInput


@pytest.mark.parametrize(
    ("data", "message", "line"),
    [
        (b"", "the file is empty", None),
        (b" \r\n\t\n", "the file is empty", None),
        (b"PK\x03\x04rest", "zip archive or a spreadsheet workbook", None),
        (b"\xd0\xcf\x11\xe0rest", "old office document", None),
        (b"%PDF-1.7\n", "PDF document", None),
        (b"\x1f\x8b\x08", "gzip", None),
        (b"t / s;A\n0;1\n1;\x002\n", "zero byte", 3),
        (b"t / s;A\n0;1\n1;\x012\n", "control character 0x01", 3),
        (b"t / s;\xb5\n0;1\n1;\x81\n", "byte 0x81 is no text in cp1252", 3),
        ("t / s;µ;µ\n0;1;µ".encode()[:-1], "middle of a character", 2),
        ("t / s;A\n0;1\n".encode("utf-16")[:-1], "cut short", 2),
        (b"<?xml version='1.0'?><a/>", "XML or HTML", 1),
        (b'{"a": 1}', "JSON", 1),
        (b"##TITLE= x\n##JCAMP-DX= 5\n", "JCAMP-DX", 1),
        (b"dear all,\nthe run went well\n", "no rows of numbers", None),
        (b"0;1\n1;2\n", "no header line", 1),
        (b"t / s\n0\n1\n", "no rows of numbers", None),
        (b"t / s;A\n", "no rows of numbers", None),
        (b"t;A\n0;1\n90;2\n", "'90' in column 't' has no unit", 3),
        (b"x;A\n0;1\n90;2\n", "no column is named as the time: x, A", None),
        (b"time 1 / s;time 2 / s;A\n0;1;2\n1;2;3\n", "several columns could be the time: time 1, time 2", None),
        (b"t / mM;A\n0;1\n", "no column is named as the time", None),
        (b"t / s;;B\n0;1;2\n", "column 2 has no name", None),
        (b"t / s;A;A\n0;1;2\n", "both called 'A'", None),
        (b"t / s;A\n0;1;2\n1;2;3\n2;3;4\n", "the header has 2 cells, the rows have 3", 1),
        (b"t / s,A\n0,1,5\n1,2,5\n", "decimal commas cannot stand in a table separated by commas", 1),
        (b"t / s;A\n0;1\n1;2;3\n2;4\n", "the row has 3 cells instead of 2", 3),
        (b"t / s;A;B\n0;1;2\n1;2;3\n2;4", "seems cut short", 4),
        (b"t / s;A\n0;1\n1;abc\n2;3\n", "'abc' in column 'A' is not a number", 3),
        (b"t / s;A\n0;abc\n1;2\n2;3\n", "'abc' in column 'A' is not a number", 2),
        (b"t / s;A\n0;=1+1\n1;2\n2;3\n", "'=1+1' in column 'A' is a formula", 2),
        (b"t / s;A\n0;1\n1;@SUM(A1)\n2;3\n", "is a formula", 3),
        (b"t / s;A\n0;1\n1;#DIV/0!\n2;3\n", "is a spreadsheet error", 3),
        (b"t / s;A\n0;1\n1;inf\n2;3\n", "is infinite", 3),
        (b"t / s;A\n0;1\n1;-Infinity\n2;3\n", "is infinite", 3),
        (b"t / s;A\n0;1\n1;1e999\n2;3\n", "is too large", 3),
        (b"t / s;A\n0;1.5\n1;1,5\n2;3.5\n", "has another decimal sign", 3),
        (b"t / s;A\n0;1\n;2\n2;3\n", "is no time; every row needs one", 3),
        (b"t / s;A\n0;1\nn.d.;2\n2;3\n", "is no time; every row needs one", 3),
        (b"t / s;A\n0;1\n1:75;2\n200;3\n", "has 60 or more after the last colon", 3),
        (b"t / h;A\n0;1\n0:30;2\n2;3\n", "'0:30' can be h:mm or mm:ss, and no other cell tells which", 3),
        (b"time;A\n0:00;1\n10:00;2\n10:05;3\n", "'10:00' can be h:mm or mm:ss", 3),
        (b"time;A\n10:00;1\n10:05;2\n10:05:30;3\n", "'10:00' can be h:mm or mm:ss", 2),
        (b"time (h:mm:ss);A\n0:00:00;1\n1:30;2\n", "'1:30' can be h:mm or mm:ss", 3),
        (b"time;A\n23:58;1\n23:59;2\n0:01;3\n", "'23:58' can be h:mm or mm:ss", 2),
        (b"t;A\n0 s;1\n1 200 s;2\n", "'1 200 s' in column 't' looks like a number with thousands", 3),
        (b"t / s;A\n0;1\n10 500 s;2\n", "looks like a number with thousands separators", 3),
        (b"t;A\n0 s;1\n1,200 s;2\n", "looks like a number with thousands separators", 3),
        (b"t;A\n1 h 30;1\n", "'1 h 30' in column 't' holds more than one number; write h:mm:ss", 2),
        (b"t / h;A\n0;1\n1h05;2\n", "'1h05' in column 't / h' holds more than one number", 3),
        (b"t;A\n0 s;1\n2 min 15 s;2\n", "holds more than one number", 3),
        (b"t;A\n0 s;1\n90 2 s;2\n", "holds more than one number", 3),
        (b"Time in min 2;A\n0;1\n1;2\n", "the header states none for time", 3),
        (b"t;A\ns*60;mM\n0;1\n1;2\n", "'s*60' in column 't' is not a number", 2),
        (b"Time;Level;Area\nmin;lactone;acid\n0;1;2\n", "lines 1 and 2 can both be the header", 2),
        (b"t / s;A;B\nfoo;bar;baz\n0;1;2\n", "'foo' in column 't / s' is not a number", 2),
        (b"t / s;A;B\n;lactone;acid\n0;1;2\n", "is no time; every row needs one", 2),
        (b"t / s;A;;\n0;1;;\n1;2;;7\n", "column 3 has no name", None),
        (b"t / s;A;;\n0;1;;\n1;2;;;;\n2;3;4;\n3;5;;\n", "column 3 has no name", None),
        (b"t / s;A\n0;1\n5 mM;2\n2;3\n", "'5 mM' in column 't / s' is not a number", 3),
        (b't / s;A\n0;1\n1;"2\n2;3\n', "quotation marks do not match", 3),
        (b"t / s;A\n0;1\n1;2\nEnd of file\n", "the row has 1 cells", 4),
        (b"t / s;A\n0;1\n1;2\nt / s;B\n0;1\n", "'t / s' in column 't / s' is not a number", 4),
    ],
)  # fmt: skip
def test_broken_files_are_refused_with_place_and_cure(data: bytes, message: str, line: int | None) -> None:
    with pytest.raises(InvalidInput) as caught:
        read(data)
    problem = caught.value.problems[0]
    assert message in str(problem)
    assert problem.line == line
    assert problem.cure


def test_a_stated_encoding_that_does_not_fit_names_the_line() -> None:
    with pytest.raises(InvalidInput, match="line 2: byte 0xb5 is no text in utf-8, as stated"):
        read(b"t / s;A\n0;1 \xb5\n", options=ReadingOptions(encoding="utf-8"))


@pytest.mark.parametrize(
    ("options", "field"),
    [
        (ReadingOptions(time_column="x"), "time_column"),
        (ReadingOptions(units=(("x", "mM"),)), "units"),
        (ReadingOptions(ignored_columns=("x",)), "ignored_columns"),
        (ReadingOptions(columns=("t",)), "columns"),
        (ReadingOptions(header_line=99), "header_line"),
    ],
)
def test_statements_about_what_is_not_there_are_refused(options: ReadingOptions, field: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        read(b"t / s;A\n0;1\n", options=options)
    assert field in (caught.value.problems[0].field, "time_column")


def test_many_problems_are_listed_together_up_to_twenty() -> None:
    rows = "".join(f"{i};x{i}\n" for i in range(100))
    with pytest.raises(InvalidInput) as caught:
        read(f"t / s;A\n{rows}100;1\n101;1\n".encode())
    assert [p.line for p in caught.value.problems] == list(range(2, 22))


def test_a_bad_row_late_in_a_long_file_is_found() -> None:
    rows = [f"{i};{i / 7:.4f}" for i in range(30_000)]
    rows[25_000] = "25000;oops"
    with pytest.raises(InvalidInput, match="line 25002, column 2: 'oops'"):
        read(("t / s;A\n" + "\n".join(rows) + "\n").encode())


def test_a_decimal_sign_that_changes_late_in_a_long_file_is_found() -> None:
    rows = [f"{i};{i},5" for i in range(30_000)]
    rows[25_000] = "25000;1.5"
    with pytest.raises(
        InvalidInput, match=r"line 25002, column 2: '1\.5' in column 'A' has another decimal sign"
    ):
        read(("t / s;A\n" + "\n".join(rows) + "\n").encode())


@pytest.mark.parametrize(("delimiter", "decimal"), [("\t", "."), (";", ","), (" ", ".")])
def test_a_million_lines_are_read_in_a_few_seconds(delimiter: str, decimal: str) -> None:
    n = 1_000_000
    step = np.arange(n)
    lines = [f"{i}.5{delimiter}{i % 977}.25" for i in step.tolist()]
    data = (f"t/min{delimiter}A\n" + "\n".join(lines) + "\n").replace(".", decimal).encode()
    start = time.perf_counter()
    table = read(data).table
    assert time.perf_counter() - start < 15  # about 3 s on an idle core; a quadratic step would take minutes
    assert np.array_equal(table.times, (step + 0.5) * 60)
    assert np.array_equal(table.values[:, 1], step % 977 + 0.25)


def test_a_messy_cell_in_every_row_still_ends_in_time() -> None:
    rows = "".join(f"{i} s;n.d.;{i}\n" for i in range(100_000))
    start = time.perf_counter()
    assert read(f"t / min;A;B\n{rows}".encode()).table.rows == 100_000
    assert time.perf_counter() - start < 15


@pytest.mark.parametrize(
    "data",
    [
        b'"' * 1_000_000, b"\n" * 3_000_000 + b"x", b"t/s;A\n" + b"(" * 90_000, b"a/" * 90_000 + b";b\n0;1\n",
        b"1:" * 90_000, b"t / s;A\n0;" + b"1" * 150_000 + b"\n1;2\n", b"1,234;" * 30_000, b"# a: b\n" * 200_000,
        b"t / s;" + b";".join(b"c%d" % i for i in range(3000)) + b"\n" + b"1;" * 3000 + b"1\n",
        (b"t/s;A\n" + b"-;-\n" * 100_000),
    ],
)  # fmt: skip
def test_hostile_files_are_refused_in_time(data: bytes) -> None:
    start = time.perf_counter()
    with pytest.raises(InvalidInput):
        read(data)
    assert time.perf_counter() - start < 10


def test_a_file_beyond_the_size_limit_is_refused_before_it_is_read() -> None:
    with pytest.raises(InvalidInput, match="at most 200 MB"):
        read(b"1" * 200_000_001)


_FILES = [
    "t / min;A / a.u.;B / a.u.\n0;1,0;0,5\n1,5;0,8;n.d.\n",
    "# S: a\nTime [s]\tA\tB\nmin\tmM\t\n0\t1\t2\n90 s\t2\t3\n1:30:00\t3\t\n",
    '"time / s","A, pure / mM"\n"0","1.5"\n"1","2.5"\n',
    "t / s   c(A) / mM\n0.0   1.0\n1.0   0.9\n",
    "a:b\nTime;A;\ns;mM;\n0;1;\n5;<2;\n",
]
_PIECES = [
    *"0123456789.,;\t| \"\n\r:-+eE#%/()[]<=@'", "nan", "inf", "n/a", "s", "min", "°", "\x00", "µ", "1e999", "9**9",
    "\ufeff", "—", '"""', "sep=;\n", "٣", "²", "\x85", "\u2028",
]  # fmt: skip


def _spoiled(seed: int) -> bytes:
    rng = random.Random(seed)
    text = list(rng.choice(_FILES))
    for _ in range(rng.randint(0, 6)):
        place, choice = rng.randrange(len(text) + 1), rng.random()
        if choice < 0.5:
            text.insert(place, rng.choice(_PIECES))
        elif choice < 0.8:
            del text[place : place + rng.randint(1, 4)]
        else:
            text[place:place] = text[: rng.randrange(len(text) + 1)]
    data = "".join(text).encode(rng.choice(["utf-8", "utf-16", "utf-16-le"]))
    if rng.random() < 0.2:
        data = data[: rng.randrange(len(data) + 1)]
    return data + bytes([rng.randrange(256)]) if rng.random() < 0.1 else data


def _read_or_refused(data: bytes) -> bool:
    try:
        result = read(data)
    except InvalidInput as refused:
        assert refused.problems
        return False
    assert isinstance(result, ReadResult)
    assert not np.isnan(result.table.times).any()
    assert (np.diff(result.table.times) > 0).all()
    return True


def test_a_thousand_spoiled_files_are_read_or_refused_and_nothing_else() -> None:
    read_well = sum(_read_or_refused(_spoiled(seed)) for seed in range(1000))
    assert 50 < read_well < 950  # both ways were tried


@settings(max_examples=300, deadline=5000)
@given(st.binary(max_size=200))
def test_any_bytes_are_read_or_refused(data: bytes) -> None:
    _read_or_refused(data)


@settings(max_examples=300, deadline=5000)
@given(st.text(alphabet="t/sA;,.\t 0123456789\n\"-:e'#%=", max_size=120))
def test_any_text_is_read_or_refused(text: str) -> None:
    _read_or_refused(b"t / s;A\n0;1\n" + text.encode())


@settings(max_examples=150, deadline=5000)
@given(
    st.lists(
        st.tuples(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6) | st.none()), min_size=1, max_size=12,
        unique_by=lambda row: row[0],
    ),
    st.sampled_from([("\t", "."), (";", "."), (";", ","), ("|", ","), (",", ".")]),
    st.sampled_from(["\n", "\r\n", "\r"]),
    st.sampled_from(["utf-8", "utf-8-sig", "utf-16"]),
)  # fmt: skip
def test_what_was_written_is_what_is_read(
    rows: list[tuple[float, float | None]], signs: tuple[str, str], ends: str, encoding: str
) -> None:
    delimiter, decimal = signs
    rows = sorted(rows)
    lines = [f"t / s{delimiter}A / mM{delimiter}C"]
    for t, value in rows:
        cells = [repr(t), "n.d." if value is None else repr(value), "0.25"]
        lines.append(delimiter.join(cell.replace(".", decimal) if cell != "n.d." else cell for cell in cells))
    table = read((ends.join(lines) + ends).encode(encoding)).table
    expected = [[t, np.nan if value is None else value, 0.25] for t, value in rows]
    assert np.array_equal(table.values, np.array(expected) + 0.0, equal_nan=True)


def test_far_too_many_columns_are_refused_before_each_is_looked_at() -> None:
    begun = time.process_time()
    with pytest.raises(InvalidInput, match="the table has 100000 columns"):
        read(b"1," * 100_000)
    assert time.process_time() - begun < 1.5


def test_a_header_is_looked_for_among_no_more_cells_than_a_person_could_mean(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    looked_at = []
    monkeypatch.setattr(layout, "parse_header", lambda cell: looked_at.append(cell) or parse_header(cell))
    monkeypatch.setattr(layout, "HEADER_CELLS", 2_000)
    words, numbers = ",".join(f"name {i}" for i in range(100)), ",".join("1" * 100)
    with pytest.raises(InvalidInput, match="no column is named as the time"):
        read("\n".join([words] * 500 + [numbers] * 500).encode())
    assert 2_000 <= len(looked_at) < 4_000
