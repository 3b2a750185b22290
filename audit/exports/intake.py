"""One export file comes in; its samples in UTC and the account of its cells go out.

Whole files are held in memory while they are read; of wide ones only wanted columns are converted.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import pyarrow as pa

from audit.errors import ExportRefused, Fault
from audit.exports import csv_file, files, layouts, parquet_file
from audit.exports.sheet import Sheet
from audit.records import ExportFile, ExportRead, ExportSource

_PEEK_BYTES = 1 << 18
_PEEK_LIMIT = 1 << 24
_FIRST_ROWS = 50


@dataclass(frozen=True)
class Peek:
    """The beginning of a file: tags named there, first stamp, what is wrong with its rows."""

    tags: tuple[str, ...]
    first_us: int | None
    faults: tuple[Fault, ...]


def read(file: ExportFile, source: ExportSource, wanted: Mapping[str, bool]) -> ExportRead:
    """All samples of the wanted tags of one file. Raises ExportRefused.

    ``wanted``: historian tag -> whether it is a mode tag, whose text is kept (numbers as their
    shortest text). Stamps are int64 microseconds UTC, strictly rising; values in the export's own
    engineering units. A sample of bad quality is kept with good False and value NaN. Of several
    samples of a tag at one stamp the later row of the file holds; the others count as
    ``duplicate`` (the same) or ``replaced``. ``first_us`` and ``last_us`` are those of the whole
    file, all tags. Each cell is counted once; a row without a readable stamp, or with cells too
    few or too many, has all its cells refused, also those no loop uses.
    """
    stored = files.fetch(file, source)
    got = _taken(_sheet(stored.data, source, wanted, file.path), source, wanted)
    named = tuple(sorted(tag for tag in got.tags if tag in wanted))
    return ExportRead(
        stored.content_hash,
        got.first_us,
        got.last_us,
        named,
        got.columns,
        got.account,
        got.faults,
    )


def peek(file: ExportFile, source: ExportSource, rows: int = 1000) -> Peek:
    """Header and first rows alone; of a narrow file the tags of those rows. Raises ExportRefused.

    Columns that hold no values of a wide file's tags cannot be told and are among the tags.
    """
    got = _taken(_head(file, source, rows), source, {})
    return Peek(tuple(tag for tag in got.tags if tag), got.first_us, got.faults)


def first_stamp(file: ExportFile, source: ExportSource) -> int | None:
    """Earliest stamp [us, UTC] of the first few rows; None where there is none to read."""
    try:
        return _taken(_head(file, source, _FIRST_ROWS), source, {}).first_us
    except ExportRefused:
        return None


def _taken(sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool]) -> layouts.Taken:
    """The samples of a sheet; columns of a type nothing can be made of refuse the file."""
    try:
        return layouts.taken(sheet, source, wanted)
    except (pa.ArrowException, NotImplementedError) as error:
        kinds = {name: str(column.type) for name, column in sheet.columns.items()}
        shown = ", ".join(f"{name} {kind}" for name, kind in list(kinds.items())[:8])
        raise ExportRefused(
            sheet.path,
            f"a column is of a type that cannot be read ({shown}): {error}",
            "export time stamps, numbers and texts as such",
        ) from error


def _sheet(data: bytes, source: ExportSource, wanted: Mapping[str, bool], path: str) -> Sheet:
    if source.format == "parquet":
        return parquet_file.sheet(data, source, wanted, path)
    return csv_file.sheet(data, source, wanted, path)


def _head(file: ExportFile, source: ExportSource, rows: int) -> Sheet:
    with files.streamed(file, source) as stream:
        if source.format == "parquet":
            return parquet_file.head(stream, source, {}, file.path, rows)
        data, whole = b"", False
        while not whole and data.count(b"\n") <= rows and len(data) < _PEEK_LIMIT:
            more = stream.read(_PEEK_BYTES)
            whole = not more
            data += more
    return csv_file.sheet(csv_file.head(data, source, rows, whole), source, {}, file.path)
