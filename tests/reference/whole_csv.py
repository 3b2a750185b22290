"""A CSV file read as a whole by pyarrow, its rows found by a regular expression.

In: all bytes. Out: a Sheet of text columns as Arrow arrays, with true line numbers.

RFC 4180 with a declared delimiter: quoted cells may hold delimiters, newlines and doubled quotes.
Text is UTF-8, with or without a byte order mark. The first row that is not empty is the header.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator, Mapping
from functools import cached_property
from typing import Any, Literal

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports.sheet import ArrowColumn, RaggedRow, Sheet, asked_for, check_names
from audit.records import ExportSource

_BLOCK_BYTES = 1 << 23
_RAGGED_SHOWN = 5
_BOM = b"\xef\xbb\xbf"
_END_MARK = b"\x1a"


def sheet(data: bytes, source: ExportSource, wanted: Mapping[str, object], path: str) -> Sheet:
    """The asked-for columns of a whole CSV file. Raises ExportRefused."""
    _check_text(data, path)
    rows = Rows(data, source.delimiter)
    header = next(rows.spans(), None)
    if header is None:
        raise ExportRefused(path, "the file is empty", "export it again")
    names = _cells(data[header[0] : header[1]], source.delimiter, path)
    check_names(names, source, path, data.count(b"\n", 0, header[0]) + 1)
    return _table(data, header[1], names, source, asked_for(names, source, wanted), rows, path)


class Rows:
    """Where rows stand in the bytes of a CSV file; empty lines are no rows."""

    def __init__(self, data: bytes, delimiter: str) -> None:
        self._data = data
        mark = re.escape(delimiter.encode())
        quoted = rb'"(?:[^"]++|"")*+"?[^' + mark + rb"\r\n]*+"
        plain = rb'[^"' + mark + rb"\r\n][^" + mark + rb"\r\n]*+"
        cell = rb"(?:" + quoted + rb"|" + plain + rb")?+"
        self._row = re.compile(cell + rb"(?:" + mark + cell + rb")*+(?:\r\n|\n|\r|\Z)")

    def spans(self) -> Iterator[tuple[int, int]]:
        """Start and end of each row, in order; the end is behind its newline."""
        at = len(_BOM) if self._data.startswith(_BOM) else 0
        while at < len(self._data):
            match = self._row.match(self._data, at)
            end = len(self._data) if match is None else match.end()
            if self._data[at:end].strip(b"\r\n"):
                yield at, end
            at = end

    def line_at(self, offset: int) -> int:
        """Line number of a byte, from 1."""
        return int(np.searchsorted(self._line_ends, offset, "right")) + 1

    def line_of(self, row: int, rows: int) -> int:
        """Line on which row ``row`` (0: the header) of ``rows`` in the file begins."""
        filled = self._filled_lines
        if len(filled) == rows:
            return int(filled[row]) + 1
        return self.line_at(int(self._starts[row]))

    @cached_property
    def _line_ends(self) -> NDArray[np.int64]:
        octets = np.frombuffer(self._data, np.uint8)
        end = octets == ord("\n")
        alone = octets == ord("\r")
        alone[:-1] &= ~end[1:]
        return np.flatnonzero(end | alone) + 1

    @cached_property
    def _filled_lines(self) -> NDArray[np.int64]:
        """Lines that are not empty, from 0: the rows, where no quoted cell holds a newline."""
        ends = np.append(self._line_ends, len(self._data))
        starts = np.append(0, ends[:-1])
        if self._data.startswith(_BOM):
            starts[0] = len(_BOM)
        octets = np.append(np.frombuffer(self._data, np.uint8), np.uint8(ord("\n")))
        filled = (ends > starts) & (octets[starts] != ord("\n")) & (octets[starts] != ord("\r"))
        return np.flatnonzero(filled)

    @cached_property
    def _starts(self) -> NDArray[np.int64]:
        return np.array([start for start, _ in self.spans()], np.int64)


def _check_text(data: bytes, path: str) -> None:
    nul = data.find(b"\0")
    broken, what = nul, "a NUL byte"
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        broken = error.start if nul < 0 else min(nul, error.start)
        what = "a NUL byte" if broken == nul else f"byte 0x{data[broken]:02x}, not UTF-8,"
    if broken >= 0:
        line = Rows(data, ",").line_at(broken)
        raise ExportRefused(
            path, f"{what} at byte {broken + 1}", "export it again as text in UTF-8", line
        )


def _cells(row: bytes, delimiter: str, path: str) -> tuple[str, ...]:
    """The cells of the header row, stripped."""
    text = io.StringIO(row.decode("utf-8"), newline="")
    try:
        cells = next(csv.reader(text, delimiter=delimiter))
    except csv.Error as error:
        raise ExportRefused(path, f"header not readable: {error}", "export it again") from error
    return tuple(cell.strip() for cell in cells)


def _table(
    data: bytes,
    body: int,
    names: tuple[str, ...],
    source: ExportSource,
    asked: list[str],
    rows: Rows,
    path: str,
) -> Sheet:
    # a last row of marks: where it does not come back, a quoted cell has swallowed it
    end = source.delimiter.encode().join([_END_MARK] * len(names))
    marked = b"%b\n%b\n" % (data[body:], end)
    places = {str(names.index(name)): name for name in asked}
    ragged: list[tuple[int, int]] = []
    try:
        table = _parsed(marked, len(names), list(places), source.delimiter, ragged)
    except pa.ArrowInvalid as error:
        raise ExportRefused(path, f"not readable as CSV: {error}", "export it again") from error
    columns = {name: table.column(place).combine_chunks() for place, name in places.items()}
    count = table.num_rows - 1
    if count < 0 or columns[source.time][count].as_py() != _END_MARK.decode():
        line = rows.line_at(list(rows.spans())[-1][0])
        raise ExportRefused(
            path, "a quoted cell is not closed", "the file is cut short; export it again", line
        )
    columns = {name: column.slice(0, count) for name, column in columns.items()}
    return _sheet(path, names, columns, count, rows, ragged)


def _parsed(
    data: bytes, width: int, places: list[str], delimiter: str, ragged: list[tuple[int, int]]
) -> pa.Table:
    """Columns by their place, as text; rows of another width go to ``ragged`` (number, width)."""

    def set_aside(row: Any) -> Literal["skip"]:
        ragged.append((row.number, row.actual_columns))
        return "skip"

    return pacsv.read_csv(
        io.BytesIO(data),
        read_options=pacsv.ReadOptions(
            use_threads=False,  # else rows that are set aside come without their number
            block_size=_BLOCK_BYTES,
            column_names=[str(place) for place in range(width)],
        ),
        parse_options=pacsv.ParseOptions(
            delimiter=delimiter, newlines_in_values=True, invalid_row_handler=set_aside
        ),
        convert_options=pacsv.ConvertOptions(
            column_types={place: pa.string() for place in places},
            include_columns=places,
            strings_can_be_null=True,
            null_values=[""],
            quoted_strings_can_be_null=True,
        ),
    )


def _sheet(
    path: str,
    names: tuple[str, ...],
    columns: Mapping[str, Any],
    count: int,
    rows: Rows,
    ragged: list[tuple[int, int]],
) -> Sheet:
    total = 1 + count + len(ragged)
    numbers = np.array([number for number, _ in ragged], np.int64)
    kept = np.setdiff1d(np.arange(1, total), numbers) if len(ragged) else np.arange(1, total)
    shown = tuple(
        RaggedRow(rows.line_of(number, total), found, len(names))
        for number, found in ragged[:_RAGGED_SHOWN]
    )
    return Sheet(
        path,
        names,
        {name: ArrowColumn(column) for name, column in columns.items()},
        count,
        lambda row: rows.line_of(int(kept[row]), total),
        len(ragged),
        shown,
    )
