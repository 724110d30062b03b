"""Tables as Apache Parquet, which notebooks read with one line."""

from __future__ import annotations

import io
import json
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from kinetics_db.exchange.tables import AnyColumn, plain_values


def parquet_bytes(columns: Sequence[AnyColumn], about: Mapping[str, Any]) -> bytes:
    """Columns of one length as a Parquet file.

    The unit of a column stands in its metadata as 'unit'; ``about``, plain values by name, in the file's, each as
    JSON.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    arrays = [_array(column.values) for column in columns]
    schema = pa.schema(
        [
            pa.field(column.name, array.type, metadata={"unit": column.unit} if column.unit else None)
            for column, array in zip(columns, arrays, strict=True)
        ],
        metadata={name: json.dumps(value) for name, value in about.items()},
    )
    out = io.BytesIO()
    pq.write_table(pa.Table.from_arrays(arrays, schema=schema), out, compression="zstd")
    return out.getvalue()


def _array(values: Any) -> Any:
    import pyarrow as pa

    if isinstance(values, np.ndarray) and values.dtype == np.float64:
        return pa.array(values, from_pandas=True)  # NaN becomes null
    return pa.array(plain_values(values))
