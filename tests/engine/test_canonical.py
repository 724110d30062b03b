"""Canonical JSON and its digest."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.engine.canonical import canonical_json, digest, plain, sha256_hex
from kinetics_db.errors import InvalidInput


def test_the_published_example_gives_its_published_bytes() -> None:
    # RFC 8785, section 3.2.2 to 3.2.4: the sample object and the hexadecimal bytes printed there.
    sample = {
        "numbers": [333333333.33333329, 1e30, 4.50, 2e-3, 0.000000000000000000000000001],
        "string": "\u20ac$\u000f\u000aA'\u0042\u0022\u005c\\\"\u002f",
        "literals": [None, True, False],
    }
    expected = (
        '{"literals":[null,true,false],"numbers":[333333333.3333333,1e+30,4.5,0.002,1e-27],'
        '"string":"€$\\u000f\\nA\'B\\"\\\\\\\\\\"/"}'
    )
    assert canonical_json(sample) == expected.encode()


def test_keys_stand_in_the_order_of_their_utf16_units() -> None:
    # RFC 8785, section 3.2.3: keys of the sorting example printed there. Its last key, U+FB33, is not in
    # Unicode NFC, so U+FF21 stands for it: above the surrogates of the emoji in UTF-16, below it by code point.
    keys = ["\uff21", "\u20ac", "\r", "1", "\U0001f600", "\u0080", "\u00f6"]
    written = canonical_json({key: i for i, key in enumerate(keys)})
    assert list(json.loads(written)) == ["\r", "1", "\u0080", "\u00f6", "\u20ac", "\U0001f600", "\uff21"]


# Numbers of RFC 8785, appendix B.
@pytest.mark.parametrize(
    ("bits", "written"),
    [
        (0x0000000000000001, b"5e-324"),
        (0x8000000000000001, b"-5e-324"),
        (0x7FEFFFFFFFFFFFFF, b"1.7976931348623157e+308"),
        (0x4340000000000000, b"9007199254740992"),
        (0x4430000000000000, b"295147905179352830000"),
        (0x44B52D02C7E14AF5, b"9.999999999999997e+22"),
        (0x44B52D02C7E14AF6, b"1e+23"),
        (0x444B1AE4D6E2EF4E, b"999999999999999700000"),
        (0x444B1AE4D6E2EF50, b"1e+21"),
        (0x3EB0C6F7A0B5ED8C, b"9.999999999999997e-7"),
        (0x3EB0C6F7A0B5ED8D, b"0.000001"),
        (0x41B3DE4355555553, b"333333333.3333332"),
        (0x8000000000000000, b"0"),
    ],
)
def test_numbers_are_written_as_the_standard_prints_them(bits: int, written: bytes) -> None:
    value = float(np.array([bits], dtype=np.uint64).view(np.float64)[0])
    assert canonical_json(value) == written


def test_the_digest_of_a_small_record_stays_what_it_was() -> None:
    record = {"b": [1, 2.5, "µ"], "a": {"ö": None, "o": True}}
    assert canonical_json(record) == '{"a":{"o":true,"ö":null},"b":[1,2.5,"µ"]}'.encode()
    assert digest(record) == "719e590713a35e04ecf687ad40b0009fd624ccfd2ed810544cb3cea2ac2fc749"
    # FIPS 180-4 test value of the empty message and of 'abc'
    assert sha256_hex(b"") == "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"
    assert sha256_hex(b"abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_minus_zero_is_zero_and_numpy_numbers_are_numbers() -> None:
    assert canonical_json([-0.0, 0.0, np.float64(-0.0)]) == b"[0,0,0]"
    assert canonical_json([np.int64(3), np.bool_(True), np.float64(0.5)]) == b"[3,true,0.5]"


def test_both_unicode_forms_of_a_text_have_one_digest() -> None:
    assert digest({"Å": "ö"}) == digest({"A\u030a": "o\u0308"})


def test_two_keys_that_become_one_are_refused() -> None:
    with pytest.raises(InvalidInput, match="stands twice"):
        canonical_json({"\u00e9": 1, "e\u0301": 2})


@pytest.mark.parametrize(
    "value", [float("nan"), float("inf"), -float("inf"), np.float64("nan"), np.float32("inf")]
)
def test_numbers_that_are_not_finite_are_refused_with_their_path(value: float) -> None:
    with pytest.raises(InvalidInput, match=r"\$\.a\[1\]"):
        canonical_json({"a": [0, value]})


def test_integers_beyond_the_exact_range_are_refused() -> None:
    assert canonical_json(2**53 - 1) == b"9007199254740991"
    for value in (2**53 + 1, -(2**53) - 1, 10**400):
        with pytest.raises(InvalidInput, match="beyond 2"):
            canonical_json({"n": value})


@pytest.mark.parametrize("value", [b"bytes", {1: "a"}, {1, 2}, object(), 1j])
def test_values_without_a_canonical_form_are_refused(value: object) -> None:
    with pytest.raises(InvalidInput):
        canonical_json(value)


_SCALARS = (
    st.none()
    | st.booleans()
    | st.integers(-(2**53) + 1, 2**53 - 1)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=["Cs"]))
)
_VALUES = st.recursive(
    _SCALARS,
    lambda inner: (
        st.lists(inner, max_size=4) | st.dictionaries(st.text("abö", max_size=3), inner, max_size=4)
    ),
    max_leaves=15,
)


@given(_VALUES)
def test_reading_the_bytes_back_and_writing_them_again_changes_nothing(value: object) -> None:
    written = canonical_json(value)
    assert canonical_json(json.loads(written)) == written


@given(_VALUES)
def test_the_plain_form_is_its_own_plain_form(value: object) -> None:
    assert plain(plain(value)) == plain(value)
