"""One export file comes in; its samples in UTC, on scratch, and the account of its cells go out.

A file is read a piece at a time, whatever its size. Two things are known at its end alone (see
``sofar``); where they matter it is read twice.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import closing, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pyarrow as pa

from audit.errors import ExportRefused, Fault
from audit.exports import csv_file, files, layouts, parquet_file
from audit.exports.sheet import Sheet
from audit.exports.sofar import Known, SoFar
from audit.exports.tally import Tally
from audit.records import ExportFile, ExportRead, ExportSource
from audit.scratch import Part, ScratchColumn, ScratchWriter

PIECE_BYTES = 16 << 20
"""Of a CSV file's content in one piece."""
_PEEK_BYTES = 1 << 18
_FIRST_BYTES = 1 << 14
_FIRST_ROWS = 50


@dataclass(frozen=True)
class Peek:
    """The beginning of a file: tags named there, first stamp, what is wrong with its rows."""

    tags: tuple[str, ...]
    first_us: int | None
    faults: tuple[Fault, ...]


def read(
    file: ExportFile,
    source: ExportSource,
    wanted: Mapping[str, bool],
    scratch: Path,
    threads: int = 1,
) -> ExportRead:
    """All samples of the wanted tags of one file. Raises ExportRefused.

    ``wanted``: historian tag -> whether it is a mode tag, whose text is kept (numbers as their
    shortest text). ``scratch``: the file the samples are written to; it is made, and is the
    caller's to remove. Stamps are int64 microseconds UTC, strictly rising; values in the export's
    own engineering units. A sample of bad quality is kept with good False and value NaN. Of several
    samples of a tag at one stamp the later row of the file holds; the others count as
    ``duplicate`` (the same) or ``replaced``. ``first_us`` and ``last_us`` are those of the whole
    file, all tags. Each cell is counted once; a row without a readable stamp, or with cells too
    few or too many, has all its cells refused, also those no loop uses.
    """
    first = _read(file, source, wanted, scratch, threads, Known())
    return first if isinstance(first, ExportRead) else _whole(file, source, wanted, scratch, first)


def _whole(
    file: ExportFile, source: ExportSource, wanted: Mapping[str, bool], scratch: Path, known: Known
) -> ExportRead:
    """The second reading of a file, with what the first has shown."""
    again = _read(file, source, wanted, scratch, 1, known)
    assert isinstance(again, ExportRead)
    return again


def _read(
    file: ExportFile,
    source: ExportSource,
    wanted: Mapping[str, bool],
    scratch: Path,
    threads: int,
    known: Known,
) -> ExportRead | Known:
    first_time = known.order is None
    so_far = SoFar(Tally(), source.limits, known)
    with (
        closing(ScratchWriter(scratch)) as writer,
        _content(file, source, wanted, scratch.parent, threads) as content,
    ):
        for sheet in content.sheets:
            writer.append(_parts(sheet, source, wanted, so_far))
        more = so_far.to_know() if first_time else None
        if more is not None:
            return more
        columns = writer.finish(
            lambda us, value: layouts.settled(us, value, so_far), so_far.texts()
        )
    for tag in so_far.no_modes & columns.keys():
        so_far.tally.refuse_taken("no_mode", columns.pop(tag).count)
    return _result(content.content_hash(), columns, wanted, so_far)


@dataclass(frozen=True, eq=False)
class _Content:
    """The pieces of a file and, once they are read to the end, the hash of its bytes as stored."""

    sheets: Iterator[Sheet]
    content_hash: Callable[[], str]


@contextmanager
def _content(
    file: ExportFile,
    source: ExportSource,
    wanted: Mapping[str, bool],
    scratch: Path,
    threads: int,
) -> Iterator[_Content]:
    if source.format == "parquet":
        with files.on_disk(file, source, scratch) as (path, content_hash):
            sheets = parquet_file.pieces(path, source, wanted, file.path, threads)
            yield _Content(sheets, lambda: content_hash)
        return
    with files.opened(file, source) as opened:
        sheets = csv_file.pieces(opened, source, wanted, file.path, threads, PIECE_BYTES)
        yield _Content(sheets, lambda: opened.content_hash)


def _result(
    content_hash: str,
    columns: Mapping[str, ScratchColumn],
    wanted: Mapping[str, bool],
    so_far: SoFar,
) -> ExportRead:
    tally = so_far.tally
    tally.taken = sum(column.count - column.bad for column in columns.values())
    tally.bad_quality = sum(column.bad for column in columns.values())
    return ExportRead(
        content_hash,
        so_far.first_us,
        so_far.last_us,
        tuple(sorted(tag for tag in so_far.tags if tag in wanted)),
        columns,
        tally.account(),
        tally.faults(),
    )


def _parts(
    sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool], so_far: SoFar
) -> list[Part]:
    """The samples of a piece; columns of a type nothing can be made of refuse the file."""
    try:
        return layouts.parts(sheet, source, wanted, so_far)
    except (pa.ArrowException, NotImplementedError) as error:
        kinds = {name: str(column.arrow().type) for name, column in sheet.columns.items()}
        shown = ", ".join(f"{name} {kind}" for name, kind in list(kinds.items())[:8])
        raise ExportRefused(
            sheet.path,
            f"a column is of a type that cannot be read ({shown}): {error}",
            "export time stamps, numbers and texts as such",
        ) from error


def peek(file: ExportFile, source: ExportSource, rows: int = 1000) -> Peek:
    """Header and first rows alone; of a narrow file the tags of those rows. Raises ExportRefused.

    Columns that hold no values of a wide file's tags cannot be told and are among the tags.
    """
    so_far = _beginning(file, source, rows, _PEEK_BYTES)
    return Peek(tuple(tag for tag in so_far.tags if tag), so_far.first_us, so_far.tally.faults())


def named(file: ExportFile, source: ExportSource) -> frozenset[str]:
    """Every tag a whole file names. Raises ExportRefused."""
    so_far = SoFar(Tally(), source.limits)
    with (
        TemporaryDirectory() as folder,
        _content(file, source, {}, Path(folder), threads=1) as content,
    ):
        for sheet in content.sheets:
            _parts(sheet, source, {}, so_far)
    return frozenset(so_far.tags)


def first_stamp(file: ExportFile, source: ExportSource) -> int | None:
    """Earliest stamp [us, UTC] of the first few rows; None where there is none to read."""
    try:
        return _beginning(file, source, _FIRST_ROWS, _FIRST_BYTES).first_us
    except ExportRefused:
        return None


def _beginning(file: ExportFile, source: ExportSource, rows: int, some_bytes: int) -> SoFar:
    """What at most so many rows of the first bytes of a file show."""
    so_far = SoFar(Tally(), source.limits)
    with files.streamed(file, source) as stream:
        if source.format == "parquet":
            sheets = parquet_file.pieces(stream, source, {}, file.path, rows=rows)
        else:
            sheets = csv_file.pieces(stream, source, {}, file.path, piece_bytes=some_bytes)
        with closing(sheets):
            _parts(_first_rows(next(sheets), rows), source, {}, so_far)
    return so_far


def _first_rows(sheet: Sheet, rows: int) -> Sheet:
    if sheet.rows <= rows:
        return sheet
    first = np.arange(rows)
    columns = {name: column.take(first) for name, column in sheet.columns.items()}
    return replace(sheet, columns=columns, rows=rows)
