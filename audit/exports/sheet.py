"""A piece of an export file as a table, before anything is made of its cells."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports import cells
from audit.exports.cells import Cells
from audit.records import ExportSource


class Column(Protocol):
    """The cells of one column [n], however the format holds them."""

    def __len__(self) -> int: ...

    def take(self, rows: NDArray[np.int64]) -> Column:
        """The cells of these rows, in this order."""

    def numbers(self, source: ExportSource) -> Cells:
        """The cells as numbers, text read as the source declares it."""

    def words(self, source: ExportSource) -> Cells:
        """The cells as texts (modes): ``value`` is an index into ``texts``, which are sorted."""

    def arrow(self) -> Any:
        """The cells as an Arrow array: stamps, tags, qualities; texts may be dictionary-coded."""

    def shown(self, row: int) -> object:
        """One cell as the file has it, for a message."""


@dataclass(frozen=True, eq=False)
class ArrowColumn:
    """A column that is an Arrow array of any type."""

    array: Any

    def __len__(self) -> int:
        return len(self.array)

    def take(self, rows: NDArray[np.int64]) -> ArrowColumn:
        return ArrowColumn(self.array.take(pa.array(rows)))

    def numbers(self, source: ExportSource) -> Cells:
        return cells.read_numbers(self.array, source)

    def words(self, source: ExportSource) -> Cells:
        return cells.words(self.array, source.decimal)

    def arrow(self) -> Any:
        return self.array

    def shown(self, row: int) -> object:
        try:
            return self.array[row].as_py()
        except UnicodeDecodeError as error:
            return error.object
        except (ValueError, OverflowError):  # a date or time beyond those of Python
            return self.array.slice(row, 1).to_string(skip_new_lines=True)


@dataclass(frozen=True)
class RaggedRow:
    """A row with too few or too many cells; ``line`` in the file."""

    line: int | None
    found: int
    expected: int


@dataclass(frozen=True, eq=False)
class Sheet:
    """Columns of a piece of a file [rows], by their name in ``names``.

    ``names``: every column of the file, also those that were not asked for. ``ragged`` of the
    piece's rows are not in the columns, ``ragged_rows`` are the first of them. ``line_of`` gives
    the file's line of a row of the columns, or None where the format has no lines. ``first_row``:
    rows of the file in the columns of the pieces before this one.
    """

    path: str
    names: tuple[str, ...]
    columns: Mapping[str, Column]
    rows: int
    line_of: Callable[[int], int | None]
    ragged: int = 0
    ragged_rows: tuple[RaggedRow, ...] = ()
    first_row: int = 0


def coded_texts(column: Any) -> Any:
    """Any Arrow column as dictionary-coded texts: no text twice in the dictionary."""
    kind = column.type
    coded = pa.types.is_dictionary(kind) and pa.types.is_string(kind.value_type)
    if coded and len(column.dictionary) == len(column.dictionary.unique()):
        return column
    return cells.as_texts(column).dictionary_encode()


def asked_for(
    names: Sequence[str], source: ExportSource, wanted: Mapping[str, object]
) -> list[str]:
    """The columns to be read: time and, as the layout says, the wanted tags or tag and value."""
    if source.layout == "wide":
        return [name for name in names if name == source.time or name in wanted]
    narrow = [source.time, source.tag, source.value]
    return narrow if source.quality is None else [*narrow, source.quality]


def check_names(names: Sequence[str], source: ExportSource, path: str, line: int | None) -> None:
    """Refuse a file whose columns are too many, repeat, or are not the declared ones."""
    most = source.limits.most_columns
    if len(names) > most:
        raise ExportRefused(
            path,
            f"it has {len(names)} columns, more than most_columns = {most} of [intake]",
            "export fewer tags to a file, or raise the limit in site.toml",
            line,
        )
    repeated = sorted(name for name, count in Counter(names).items() if name and count > 1)
    if repeated:
        raise ExportRefused(
            path,
            f"column names stand more than once: {', '.join(repeated[:5])}",
            "each column needs its own name",
            line,
        )
    missing = [name for name in asked_for([source.time], source, {}) if name not in names]
    if missing:
        shown = ", ".join(repr(name) for name in names[:8])
        raise ExportRefused(
            path,
            f"no column {', '.join(repr(name) for name in missing)}; it has {shown}",
            "the first row must hold the column names, and [[exports]] in site.toml name the "
            "time column (and of a narrow file tag, value, quality) as they stand there",
            line,
        )
