"""Frames as parquet bytes that depend on nothing but the numbers."""

from __future__ import annotations

import io

import pandas as pd


def parquet_bytes(frame: pd.DataFrame) -> bytes:
    """The frame as parquet, one row group, zstd; the same bytes for the same frame."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    table = pa.Table.from_pandas(frame, preserve_index=False).replace_schema_metadata(None)
    buffer = io.BytesIO()
    pq.write_table(table, buffer, compression="zstd", row_group_size=max(len(frame), 1))
    return buffer.getvalue()
