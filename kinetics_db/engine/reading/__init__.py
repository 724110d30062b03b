"""Instrument files to signal tables: one module per format and one line in `READERS`."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from kinetics_db.engine.reading.delimited import read_delimited
from kinetics_db.engine.reading.options import ReadingOptions
from kinetics_db.engine.reading.result import ReadResult
from kinetics_db.errors import InvalidInput

__all__ = ["READERS", "ReadResult", "ReadingOptions", "read"]

#: Readers by the name that people choose.
READERS: Mapping[str, Callable[[bytes, ReadingOptions | None], ReadResult]] = {
    "delimited text": read_delimited,
}


def read(data: bytes, *, reader: str = "delimited text", options: ReadingOptions | None = None) -> ReadResult:
    """Read the bytes of an instrument file.

    Raises
    ------
    InvalidInput
        for an unknown reader, or whatever the reader cannot read.
    """
    if reader not in READERS:
        raise InvalidInput(
            f"there is no reader '{reader}'", field="reader", cure="one of " + ", ".join(READERS)
        )
    return READERS[reader](data, options)
