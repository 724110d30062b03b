"""What clumsy and hostile hands put into fields."""

from __future__ import annotations

MARKUP = "<script>alert(1)</script>\"'&"
RAW_MARKUP = ("<script>alert(1)", "</script>\"'&")
"""What no answer may hold: each shows that something was not escaped."""

TEXTS: dict[str, bytes] = {
    "nothing": b"",
    "blanks": b"   ",
    "too large for a float": b"1e400",
    "negative": b"-1",
    "not a number": b"nan",
    "infinite": b"inf",
    "a decimal comma": b"1,5",
    "very long": b"x" * 100_000,
    "very many digits": b"9" * 5_000,
    "NUL": b"a\0b",
    "not UTF-8": b"\xff\xfe\xe9",
    "a lone surrogate": b"\xed\xa0\x80",
    "right to left, a picture, controls": "\u202etxt.exe \U0001f9ea \x07\x1b[31m\u200b".encode(),
    "markup": MARKUP.encode(),
    "a path": b"../../etc/passwd",
    "lines": b"1\r\n2\n3",
    "too small for a float": b"1e-400",
    "other digits": "\u0663\u00b2".encode(),
    "a template": b"{{ 7 }}{% now 'Y' %}",
    "a quote for a database": b"'; DROP TABLE runs_run; --",
    "brackets": b"[{(" * 300,
    "a plain object": b'{"a": [1, null]}',
    "the largest id and one": b"9223372036854775808",
}

FILES: dict[str, tuple[str, bytes]] = {
    "empty": ("empty.csv", b""),
    "blank lines": ("blank.csv", b"\n" * 1_000),
    "bytes of all kinds": ("bytes.csv", bytes(range(256)) * 40),
    "NULs": ("nul.csv", b"\0" * 5_000),
    "one long line": ("line.csv", b"1," * 100_000),
    "markup in a heading": ("head.csv", f"t / s,{MARKUP}\n0,1\n1,2\n".encode()),
    "a hostile name": (f"../../{MARKUP}.csv", b"t / s,A\n0,1\n1,2\n"),
    "a long name": ("n" * 300 + ".csv", b"t / s,A\n0,1\n1,2\n"),
    "no name": ("", b"t / s,A\n0,1\n1,2\n"),
    "numbers beyond floats": ("large.csv", b"t / s,A\n0,1e400\n1e999,2\n"),
    "UTF-16": ("utf16.csv", "t / s,A\n0,1\n1,2\n".encode("utf-16")),
    "a torn surrogate": ("torn.csv", b"t / s,A\xed\xa0\x80\n0,1\n"),
    "a packed file": ("packed.xlsx", b"PK\x03\x04" + b"\0" * 500),
    "many columns": (
        "wide.csv",
        b",".join(b"c%d" % i for i in range(5_000)) + b"\n" + b"1," * 4_999 + b"1\n",
    ),
}
