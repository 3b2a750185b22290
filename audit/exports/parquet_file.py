"""A Parquet file comes in, Sheets of its columns as they are typed go out, some rows at a time."""

from __future__ import annotations

from collections.abc import Generator, Iterator, Mapping
from pathlib import Path
from typing import Any, BinaryIO

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from audit.errors import ExportRefused
from audit.exports.sheet import ArrowColumn, Sheet, asked_for, check_names
from audit.records import ExportSource

_CELLS_AT_ONCE = 4_000_000
_LEAST_ROWS = 1 << 10
_MOST_ROWS = 1 << 20
_BYTES = (pa.types.is_binary, pa.types.is_large_binary, pa.types.is_fixed_size_binary)


def pieces(
    stored: Path | BinaryIO,
    source: ExportSource,
    wanted: Mapping[str, bool],
    path: str,
    threads: int = 1,
    rows: int | None = None,
) -> Generator[Sheet, None, None]:
    """The asked-for columns, some rows at a time; at least one Sheet. Raises ExportRefused.

    ``rows``: only so many, from the beginning. What is read of the file are its footer and the
    pages of those columns; memory is bounded by a row group as it is stored and one piece.
    """
    try:
        footer = pq.read_metadata(stored)
        names = tuple(str(name) for name in footer.schema.to_arrow_schema().names)
        check_names(names, source, path, None)
        asked = asked_for(names, source, wanted)
        plain = {footer.schema.column(at).path for at in range(len(footer.schema))}
        modes = [name for name in asked if wanted.get(name) and name in plain]
        with pq.ParquetFile(stored, metadata=footer, read_dictionary=modes) as file:
            yield from _pieces(file, names, asked, path, threads, rows)
    except (pa.ArrowException, OSError, EOFError, UnicodeDecodeError) as error:
        raise ExportRefused(
            path,
            f"not readable as Parquet: {error}",
            "the file is cut short or damaged; export it again",
        ) from error


def _pieces(
    file: Any, names: tuple[str, ...], asked: list[str], path: str, threads: int, rows: int | None
) -> Iterator[Sheet]:
    at_once = rows or min(_MOST_ROWS, max(_LEAST_ROWS, _CELLS_AT_ONCE // len(asked)))
    done = 0
    for batch in file.iter_batches(batch_size=at_once, columns=asked, use_threads=threads > 1):
        yield _sheet(batch, names, asked, path, done)
        done += batch.num_rows
        if rows is not None:
            return
    if done == 0:
        empty = pa.RecordBatch.from_pylist([], schema=file.schema_arrow)
        yield _sheet(empty, names, asked, path, 0)


def _sheet(batch: Any, names: tuple[str, ...], asked: list[str], path: str, done: int) -> Sheet:
    place = {name: at for at, name in enumerate(batch.schema.names)}
    columns = {name: ArrowColumn(_plain(batch.column(place[name]))) for name in asked}
    return Sheet(path, names, columns, batch.num_rows, lambda row: None, first_row=done)


def _plain(column: Any) -> Any:
    """The kinds of text that not every Arrow function knows, as plain text.

    Some writers leave the mark of a text column out; its bytes are taken for text where they are.
    Raises ArrowInvalid for a text that is not UTF-8.
    """
    column.validate(full=True)
    kind = column.type
    if pa.types.is_string_view(kind):
        return pc.cast(column, pa.string())
    if not any(is_kind(kind) for is_kind in _BYTES):
        return column
    try:
        return pc.cast(column, pa.string())
    except pa.ArrowInvalid:
        return column
