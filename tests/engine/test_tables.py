"""Tables and their canonical bytes."""

import hashlib
import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from kinetics_db.engine.tables import Column, Table, table
from kinetics_db.errors import InvalidInput

COLUMNS = [("t", "s", "time"), ("A", "mol/L", "concentration")]


def test_the_bytes_are_a_canonical_header_and_little_endian_rows() -> None:
    small = table(COLUMNS, [[0.0, 1.0], [60.0, 0.5]])
    header = (
        b'{"columns":[{"name":"t","quantity":"time","unit":"s"},'
        b'{"name":"A","quantity":"concentration","unit":"mol/L"}],"format":"ratewright/table/1","rows":2}\n'
    )
    assert small.to_bytes() == header + struct.pack("<4d", 0.0, 1.0, 60.0, 0.5)
    assert (
        hashlib.sha256(small.to_bytes()).hexdigest()
        == "34bac44756d037a831a0aeb6bea1ecd17ce04339d443707fb19a87b58a4747a2"
    )


def test_minus_zero_is_stored_as_zero() -> None:
    assert table(COLUMNS, [[-0.0, -0.0]]).to_bytes()[-16:] == bytes(16)


def test_every_missing_value_has_one_bit_pattern() -> None:
    odd = np.array([[0.0, 0.0]])
    odd.view(np.uint64)[0, 1] = 0xFFF8000000000123  # a negative NaN with a payload
    stored = table(COLUMNS, odd).to_bytes()[-8:]
    assert stored == struct.pack("<Q", 0x7FF8000000000000)
    assert table(COLUMNS, odd) == table(COLUMNS, [[0.0, np.nan]])


def test_the_values_do_not_follow_the_array_they_came_from_and_cannot_be_changed() -> None:
    source = np.array([[0.0, 1.0]])
    kept = table(COLUMNS, source)
    source[0, 1] = 5.0
    assert kept.values[0, 1] == 1.0
    with pytest.raises(ValueError, match="read-only"):
        kept.values[0, 1] = 2.0


def test_column_order_of_the_source_array_does_not_matter() -> None:
    fortran = np.asfortranarray([[0.0, 1.0], [1.0, 2.0]])
    assert table(COLUMNS, fortran).to_bytes() == table(COLUMNS, fortran.copy(order="C")).to_bytes()


def test_both_unicode_forms_of_a_name_give_the_same_bytes() -> None:
    one, two = (table([("t", "s", "time"), (name, "", "signal")], [[0.0, 1.0]]) for name in ("Å", "A\u030a"))
    assert one.to_bytes() == two.to_bytes()


def test_columns_are_found_by_name_and_quantity() -> None:
    both = table([*COLUMNS, ("A", "mol/L", "standard uncertainty")], [[0.0, 1.0, 0.1]])
    assert both.column("A", "concentration") == 1.0
    assert both.column("A", "standard uncertainty") == 0.1
    assert both.names("concentration") == ("A",)
    assert both.times.tolist() == [0.0]
    with pytest.raises(KeyError):
        both.column("B", "concentration")


@pytest.mark.parametrize(
    ("columns", "values", "message"),
    [
        (COLUMNS, [[0.0, 1.0, 2.0]], "2 columns got values of shape"),
        (COLUMNS, [0.0, 1.0], "2 columns got values of shape"),
        (COLUMNS, [[0.0, 1.0], [1.0, np.inf]], "infinite value in row 2 of column 'A'"),
        (
            [COLUMNS[0], COLUMNS[1], COLUMNS[1]],
            [[0.0, 1.0, 2.0]],
            r"column 'A' \(concentration\) stands twice",
        ),
    ],
)
def test_wrong_shapes_infinities_and_double_columns_are_refused(
    columns: list[tuple[str, str, str]], values: object, message: str
) -> None:
    with pytest.raises(InvalidInput, match=message):
        table(columns, values)


@pytest.mark.parametrize("spoil", [b"", b"{}", b"no header\n\x00", b"[1]\n", b'{"format":"other"}\n'])
def test_bytes_that_are_no_table_are_refused(spoil: bytes) -> None:
    with pytest.raises(InvalidInput, match="not a stored table"):
        Table.from_bytes(spoil)


def test_bytes_that_are_cut_short_are_refused() -> None:
    whole = table(COLUMNS, [[0.0, 1.0], [1.0, 2.0]]).to_bytes()
    for cut in (1, 8, 16):
        with pytest.raises(InvalidInput, match="not a stored table"):
            Table.from_bytes(whole[:-cut])


def test_a_newline_in_a_name_does_not_end_the_header() -> None:
    odd = table([("t\nx", "s", "time"), COLUMNS[1]], [[0.0, 1.0]])
    assert Table.from_bytes(odd.to_bytes()) == odd


@given(
    hnp.arrays(np.float64, st.tuples(st.integers(0, 5), st.just(2)), elements=st.floats(allow_infinity=False))
)
def test_a_table_comes_back_from_its_bytes(values: np.ndarray) -> None:
    original = table(COLUMNS, values)
    back = Table.from_bytes(original.to_bytes())
    assert back == original
    assert back.columns == tuple(Column(*c) for c in COLUMNS)
    assert np.array_equal(back.values, values, equal_nan=True)
