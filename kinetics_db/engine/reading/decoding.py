"""Bytes to lines of text, or a clear word why they are none."""

from __future__ import annotations

import codecs
import re

from kinetics_db.errors import InvalidInput, Problem

MAX_BYTES = 200_000_000

_MAGIC: tuple[tuple[bytes, str], ...] = (
    (b"PK\x03\x04", "a zip archive or a spreadsheet workbook (.xlsx, .ods)"),
    (b"\xd0\xcf\x11\xe0", "an old office document (.xls, .doc)"),
    (b"%PDF", "a PDF document"),
    (b"\x1f\x8b", "a gzip archive"),
    (b"7z\xbc\xaf", "a 7z archive"),
    (b"Rar!", "a RAR archive"),
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"GIF8", "a GIF picture"),
    (b"\x89HDF", "an HDF5 file"),
    (b"CDF\x01", "a netCDF file"),
    (b"{\\rtf", "a rich text document"),
)
_BOMS: tuple[tuple[bytes, str, str], ...] = (
    (codecs.BOM_UTF8, "utf-8", "UTF-8 with a byte order mark"),
    (codecs.BOM_UTF32_LE, "utf-32-le", "UTF-32 with a byte order mark"),
    (codecs.BOM_UTF32_BE, "utf-32-be", "UTF-32 with a byte order mark"),
    (codecs.BOM_UTF16_LE, "utf-16-le", "UTF-16 with a byte order mark"),
    (codecs.BOM_UTF16_BE, "utf-16-be", "UTF-16 with a byte order mark"),
)
_CONTROL = re.compile(r"[\x00-\x08\x0e-\x1f\x7f]")
_EXPORT = "export the table as delimited text (CSV) and upload that"


def lines_of(data: bytes, encoding: str | None) -> tuple[list[str], list[str]]:
    """Lines without their ends, and notes on how they were decoded.

    Raises
    ------
    InvalidInput
        for empty, oversized, binary, truncated or wrongly encoded data; names the line where it can.
    """
    if not data.strip(b"\r\n\t \x00"):
        raise InvalidInput("the file is empty", cure="a text file with a header line and rows of numbers")
    if len(data) > MAX_BYTES:
        size = len(data) / 1e6
        raise InvalidInput(f"the file has {size:.0f} MB", cure=f"at most {MAX_BYTES / 1e6:.0f} MB")
    for magic, what in _MAGIC:
        if data.startswith(magic):
            raise InvalidInput(f"the file is {what}, not delimited text", cure=_EXPORT)
    text, note = _decode(data, encoding)
    text = text.removeprefix("\ufeff").rstrip("\x1a")  # DOS programs end text with control-Z
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    control = _CONTROL.search(text)
    if control is not None:
        line = text.count("\n", 0, control.start()) + 1
        message = f"control character {ord(control.group()):#04x}: the file is binary or damaged"
        raise InvalidInput(Problem(message, line=line, cure=_EXPORT))
    notes = [f"text encoding: {note}"]
    _refuse_other_text(text)
    for odd, usual, what in (("\u2212", "-", "minus signs (U+2212)"), ("\xa0", " ", "no-break blanks")):
        if odd in text:
            text = text.replace(odd, usual)
            notes.append(f"{what} are read as plain ones")
    return text.split("\n"), notes


def _decode(data: bytes, encoding: str | None) -> tuple[str, str]:
    if encoding is not None:
        return _strict(data, encoding, given=True), f"{encoding}, as stated"
    for bom, name, note in _BOMS:
        if data.startswith(bom):
            return _strict(data[len(bom) :], name), note
    wide = _wide_encoding(data)
    if wide:
        return _strict(data, wide), f"{wide.upper()} without a byte order mark, seen from its zero bytes"
    if b"\x00" in data:
        line = data.count(b"\n", 0, data.index(b"\x00")) + 1
        raise InvalidInput(Problem("zero byte: the file is binary or damaged", line=line, cure=_EXPORT))
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        if error.reason == "unexpected end of data" and any(byte > 127 for byte in data[: error.start]):
            message = "the file ends in the middle of a character: it is cut short"
            raise InvalidInput(
                Problem(message, line=_line(data, error.start), cure="upload it again")
            ) from error
        text = _strict(data, "cp1252")
        sign, line = text[error.start], _line(data, error.start)
        return text, f"Windows-1252, since it is not UTF-8 (first seen at '{sign}' in line {line})"
    return text, "UTF-8" if not text.isascii() else "plain ASCII"


def _strict(data: bytes, encoding: str, *, given: bool = False) -> str:
    try:
        return data.decode(encoding)
    except UnicodeDecodeError as error:
        why = "as stated" if given else "which it seemed to be"
        if error.reason in ("truncated data", "unexpected end of data"):
            message = f"the file ends in the middle of a character of {encoding}: it is cut short"
        else:
            message = f"byte {data[error.start]:#04x} is no text in {encoding}, {why}"
        cure = "state the encoding of the file"
        raise InvalidInput(Problem(message, line=_line(data, error.start), cure=cure)) from error


def _line(data: bytes, position: int) -> int:
    before = data[:position]
    return (before.count(b"\n") or before.count(b"\r")) + 1


def _wide_encoding(data: bytes) -> str | None:
    """UTF-16 without a mark: nearly every second byte of Latin text is zero."""
    head = data[:4096]
    even, odd = head[0::2].count(0), head[1::2].count(0)
    half = len(head) / 2
    if odd > 0.7 * half and even == 0:
        return "utf-16-le"
    if even > 0.7 * half and odd == 0:
        return "utf-16-be"
    return None


def _refuse_other_text(text: str) -> None:
    head = text[:500].lstrip().lower()
    kinds = (
        (("<?xml", "<html", "<!doctype"), "XML or HTML"),
        (("{\n", '{"', "[{", "[["), "JSON"),
        (("##title",), "JCAMP-DX"),
    )
    for beginnings, what in kinds:
        if head.startswith(beginnings):
            raise InvalidInput(Problem(f"the file is {what}, not delimited text", line=1, cure=_EXPORT))
