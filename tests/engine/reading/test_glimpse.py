"""What can be shown of a file, readable or not."""

from __future__ import annotations

import pytest

from kinetics_db.engine.reading import ReadingOptions
from kinetics_db.engine.reading.glimpse import FIRST_LINES, LONGEST_LINE, MOST_LINES, column_names, raw_lines


@pytest.mark.parametrize(
    ("data", "options", "names"),
    [
        (b"t / min;A / mM;remark\n0;1,5;new\n1;2,5;old\n", {}, ("t", "A", "remark")),
        (b"t / min;A;B\n0;1,5;2\n", {"columns": ("x", "y", "z"), "units": (("y", "mM"),)}, ("t", "A", "B")),
        (b"0,1,2\n1,2,3\n", {"header_line": 0}, ("", "", "")),
        (b"0,1,2\n1,2,3\n", {"header_line": 0, "columns": ("t", "A", "B")}, ("", "", "")),
        (b"t / s,A\n0,x\n", {"time_column": "nowhere"}, ("t", "A")),
        (b"", {}, ()),
        (b"\x00" * 100, {}, ()),
        (b"no table\n", {}, ()),
    ],
)
def test_names_are_those_of_the_file_whatever_is_stated(
    data: bytes, options: dict[str, object], names: tuple[str, ...]
) -> None:
    assert column_names(data, ReadingOptions(**options)) == names  # type: ignore[arg-type]


def test_the_first_lines_and_those_around_wrong_ones_are_shown() -> None:
    data = b"\r\n".join(b"line %d" % n for n in range(1, 101))
    found = raw_lines(data, around=[50])
    assert [number for number, _ in found] == [*range(1, FIRST_LINES + 1), 48, 49, 50, 51, 52]
    assert found[-1] == (52, "line 52")


def test_only_so_many_lines_and_so_much_of_each_are_shown() -> None:
    data = b"\n".join(b"x" * 10_000 for _ in range(1000))
    found = raw_lines(data, around=range(1, 1000, 10))
    assert len(found) <= MOST_LINES + 5
    assert all(len(text) == LONGEST_LINE + 1 for _, text in found)


@pytest.mark.parametrize(
    "data", [b"\x00\x01\x02\xff\xfe\x81", b"", b"\xff\xfe\x00\xd8", b"\x1b[31mred\n\x7f"]
)
def test_binary_bytes_are_shown_without_signs_that_cannot_be_shown(data: bytes) -> None:
    for _, text in raw_lines(data, around=[1, 10**9, -5]):
        assert not any(ord(sign) < 32 or 0x7F <= ord(sign) < 0xA0 for sign in text)


def test_lines_are_shown_in_the_stated_encoding_even_where_it_is_wrong() -> None:
    assert raw_lines("Zeit;Fläche".encode("cp1252"))[0] == (1, "Zeit;Fläche")
    assert raw_lines("t;A\n0;1".encode("utf-16"))[1] == (2, "0;1")
    assert raw_lines(b"t;\x81", "utf-8")[0][1].startswith("t;")
