"""Bytes of a Parquet file come in, a Sheet of its columns as they are typed goes out."""

from __future__ import annotations

import io
from collections.abc import Mapping
from typing import Any, BinaryIO

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from audit.errors import ExportRefused
from audit.exports.sheet import Sheet, asked_for, check_names
from audit.records import ExportSource

_BYTES = (pa.types.is_binary, pa.types.is_large_binary, pa.types.is_fixed_size_binary)


def sheet(data: bytes, source: ExportSource, wanted: Mapping[str, object], path: str) -> Sheet:
    """The asked-for columns of a whole Parquet file. Raises ExportRefused."""
    return _read(io.BytesIO(data), source, wanted, path, None)


def head(
    stream: BinaryIO, source: ExportSource, wanted: Mapping[str, object], path: str, rows: int
) -> Sheet:
    """As ``sheet``, the first ``rows`` rows alone; reads the footer and what those rows need."""
    return _read(stream, source, wanted, path, rows)


def _read(
    stream: Any, source: ExportSource, wanted: Mapping[str, object], path: str, rows: int | None
) -> Sheet:
    try:
        file = pq.ParquetFile(stream)
        names = tuple(str(name) for name in file.schema_arrow.names)
        check_names(names, source, path, None)
        asked = asked_for(names, source, wanted)
        if rows is None:
            table = file.read(columns=asked)
        else:
            first = next(iter(file.iter_batches(batch_size=rows, columns=asked)), None)
            empty = file.schema_arrow.empty_table()
            table = empty if first is None else pa.Table.from_batches([first])
    except (pa.ArrowException, OSError, EOFError) as error:
        raise ExportRefused(
            path,
            f"not readable as Parquet: {error}",
            "the file is cut short or damaged; export it again",
        ) from error
    columns = {name: _one(table.column(name)) for name in asked}
    return Sheet(path, names, columns, table.num_rows, lambda row: None)


def _one(column: Any) -> Any:
    whole = column.combine_chunks()
    return _plain(pa.concat_arrays(whole.chunks) if isinstance(whole, pa.ChunkedArray) else whole)


def _plain(column: Any) -> Any:
    """The kinds of text that not every Arrow function knows, as plain text.

    Some writers leave the mark of a text column out; its bytes are taken for text where they are.
    """
    kind = column.type
    if pa.types.is_string_view(kind):
        return pc.cast(column, pa.string())
    if not any(is_kind(kind) for is_kind in _BYTES):
        return column
    try:
        return pc.cast(column, pa.string())
    except pa.ArrowInvalid:
        return column
