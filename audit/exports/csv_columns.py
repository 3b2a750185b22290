"""Columns of a piece of a CSV file as it was read: numbers in a block, and coded texts."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from audit.exports import cells
from audit.exports.cells import Cell, Cells
from audit.exports.csv_compiled import compile_kernels
from audit.records import ExportSource

Rows = NDArray[np.int64]


class CellTexts(Protocol):
    """The texts of one column as the file has them."""

    def arrow(self, rows: Rows | None) -> Any:
        """Those of some rows, or of all: an Arrow array of strings, null where blank."""


@dataclass(frozen=True, eq=False)
class ParsedColumn:
    """A column of numbers that are read already; ``rows``: which of them, None: all.

    With ``block`` [columns, rows], C-contiguous, the column's values are block[row_in_block]: for
    those who write many columns at once.
    """

    read: Cells
    texts: CellTexts
    rows: Rows | None = None
    block: NDArray[np.float64] | None = None
    row_in_block: int = 0

    def __len__(self) -> int:
        return len(self.read.value if self.rows is None else self.rows)

    def take(self, rows: Rows) -> ParsedColumn:
        chosen = rows if self.rows is None else self.rows[rows]
        return ParsedColumn(self.read, self.texts, chosen)

    def numbers(self, source: ExportSource) -> Cells:
        """As they were read: ``source`` is that of the file."""
        if self.rows is None:
            return self.read
        value, held = self.read.value[self.rows], self.read.held[self.rows]
        return Cells(value, held, None, self.read.all_values)

    def words(self, source: ExportSource) -> Cells:
        return cells.words(self.arrow(), source.decimal)

    def arrow(self) -> Any:
        return self.texts.arrow(self.rows)

    def shown(self, row: int) -> object:
        return self.take(np.array([row])).arrow()[0].as_py()


@dataclass(frozen=True, eq=False)
class CodedTexts:
    """Different texts [n] of a piece, an Arrow array of strings."""

    array: Any

    @cached_property
    def texts(self) -> list[str]:
        texts: list[str] = self.array.to_pylist()
        return texts


@dataclass(frozen=True, eq=False)
class CodedColumn:
    """A column of texts: ``codes`` [rows] are indices into ``coded``, -1 for a blank cell.

    ``constant``: all rows are known to hold the same; ``all_used``: each of the texts is known to
    stand in some row.
    """

    coded: CodedTexts
    codes: NDArray[np.int32]
    constant: bool = False
    all_used: bool = False

    def __len__(self) -> int:
        return len(self.codes)

    def take(self, rows: Rows) -> CodedColumn:
        return CodedColumn(self.coded, self.codes[rows], self.constant)

    def numbers(self, source: ExportSource) -> Cells:
        return cells.read_numbers(self.arrow(), source)

    def words(self, source: ExportSource) -> Cells:
        """The cells' texts; of a constant column without a look at each cell."""
        count = len(self.codes)
        if not self.constant or count == 0:
            codes = self.codes.astype(np.int64)
            return cells.coded_words(self.coded.texts, codes, source.decimal)
        code = int(self.codes[0])
        text = cells.canonical_text(self.coded.texts[code], source.decimal) if code >= 0 else ""
        held = np.full(count, Cell.VALUE if text else Cell.BLANK, np.int8)
        return Cells(np.zeros(count), held, (text,) if text else (), bool(text))

    def arrow(self) -> Any:
        """Dictionary-coded; only texts that are there stand in the dictionary."""
        code, some = self.codes, self.coded.array
        if not self.all_used:
            used = np.bincount(code + 1, minlength=len(some) + 1)[1:] > 0
            code = np.append(np.cumsum(used) - 1, -1).astype(np.int32)[code]
            some = some.take(pa.array(np.flatnonzero(used)))
        blank = code < 0
        indices: Any = pa.array(code, mask=blank if blank.any() else None)
        return pa.DictionaryArray.from_arrays(indices, some, safe=False)

    def shown(self, row: int) -> object:
        code = int(self.codes[row])
        return None if code < 0 else self.coded.array[code].as_py()


def joined_texts(data: NDArray[np.uint8], at: NDArray[np.int32], length: NDArray[np.int32]) -> Any:
    """Texts that stand in the data as an Arrow array of strings."""
    edges: Any = np.empty(len(at) + 1, np.int32)
    joined: Any = np.empty(max(1, int(length.sum(dtype=np.int64))), np.uint8)
    compile_kernels().gather(data, at, length, edges, joined)
    buffers = [None, pa.py_buffer(edges), pa.py_buffer(joined)]
    return pa.Array.from_buffers(pa.string(), len(at), buffers)


def null_where_empty(texts: Any) -> Any:
    """As an empty cell is read: there is nothing."""
    return pc.if_else(pc.equal(texts, pa.scalar("")), pa.scalar(None, pa.string()), texts)
