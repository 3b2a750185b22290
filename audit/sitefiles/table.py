"""A CSV file of the site -> rows of cells with their true line numbers, and what is wrong with it.

In: a path and the columns that are known. Out: a ``Table`` of stripped texts; ``Cells`` turns the
cells of one row into values and notes what is wrong with each. Commas part the cells (RFC 4180);
a quoted cell may run over several lines, and a row is named by the line it starts on.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from audit.errors import Fault
from audit.sitefiles.text import fingerprint, meant, nearest, open_file

LARGEST = 1e30
"""Numbers beyond it are taken for a slip; keeps every difference of two finite."""

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_COMMA = re.compile(r"[+-]?\d*,\d+", re.ASCII)
_WHOLE = re.compile(r"[+-]?\d{1,9}", re.ASCII)
_CONTROL = re.compile(r"[\x00-\x1f\x7f]")


@dataclass(frozen=True)
class Columns:
    """The columns a table may have. ``others``: any more are kept, else they are faults."""

    required: tuple[str, ...]
    optional: tuple[str, ...]
    others: bool

    @property
    def known(self) -> tuple[str, ...]:
        return self.required + self.optional


@dataclass(frozen=True)
class Row:
    """One row: the line it starts on, its cells by column; ``whole``: it has the header's width."""

    line: int
    cells: Mapping[str, str]
    whole: bool


@dataclass(frozen=True)
class Table:
    """``others``: columns kept besides the known ones. ``complete``: the file was read to its end
    with all required columns, so that what is not in it is really missing."""

    name: str
    rows: tuple[Row, ...]
    others: tuple[str, ...]
    complete: bool
    content_hash: str
    faults: tuple[Fault, ...]


def read_table(path: Path, columns: Columns) -> Table:
    """The table at ``path``. Blank rows, and cells past the header's width that are blank, go."""
    file = open_file(path)
    faults = list(file.faults)
    lines, to_the_end = _numbered(file.name, file.text or "", faults)
    content_hash = fingerprint([_trimmed(cells) for _, cells in lines])
    line, header = lines[0] if lines else (1, [])
    if file.text is not None and (problem := _no_header(header)):
        remedy = f"comma-separated text whose first row names {', '.join(columns.required)}, ..."
        faults.append(Fault(file.name, problem, remedy, line))
    if not header or _no_header(header):
        return Table(file.name, (), (), False, content_hash, tuple(faults))
    _check_header(file.name, line, header, columns, faults)
    rows = tuple(_row(file.name, at, header, cells, faults) for at, cells in lines[1:])
    complete = to_the_end and set(header).issuperset(columns.required)
    others = tuple(name for name in dict.fromkeys(header) if name and name not in columns.known)
    return Table(file.name, rows, others, complete, content_hash, tuple(faults))


def _numbered(
    name: str, text: str, faults: list[Fault]
) -> tuple[list[tuple[int, list[str]]], bool]:
    """The rows that hold anything, stripped, each with its first line; and if all could be read."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    rows: list[tuple[int, list[str]]] = []
    while True:
        line = reader.line_num + 1
        try:
            cells = [cell.strip() for cell in next(reader)]
        except StopIteration:
            return rows, True
        except csv.Error as failure:
            remedy = 'check the quotes: one inside a quoted cell is written twice ("")'
            problem = f"cannot be read from this row on ({failure})"
            faults.append(Fault(name, problem, remedy, line))
            return rows, False
        if any(cells):
            rows.append((line, cells))


def _no_header(header: Sequence[str]) -> str | None:
    """Why a first row names no columns; None if it does."""
    if not header:
        return "is empty"
    mark = re.search(r"[;\t|]", header[0])
    if mark and len(_trimmed(header)) == 1:
        return f"has its cells parted by {mark[0]!r}, not by commas"
    return None


def _trimmed(cells: Sequence[str]) -> list[str]:
    kept = list(cells)
    while kept and not kept[-1]:
        kept.pop()
    return kept


def _check_header(
    name: str, line: int, header: Sequence[str], columns: Columns, faults: list[Fault]
) -> None:
    missing = [column for column in columns.known if column not in header]

    def wrong(column: str, problem: str, remedy: str) -> None:
        faults.append(Fault(name, f"column '{column}' {problem}", remedy, line, column))

    for column, times in Counter(filter(None, header)).items():
        if times > 1:
            wrong(column, f"stands there {times} times", "keep one of them")
        if column not in columns.known and (not columns.others or _slip(column, missing)):
            wrong(column, "is unknown", _column_meant(column, columns))
    for column in columns.required:
        if column in missing:
            wrong(column, "is missing", f"add a column {column}")


def _slip(column: str, missing: Sequence[str]) -> bool:
    """Whether a column is so near a known one that is missing that it must be meant for it."""
    likeness = 0.85 if len(column) >= 7 else 1.0
    return nearest(column, missing, likeness) is not None


def _column_meant(column: str, columns: Columns) -> str:
    remedy = meant(column, columns.known, "known columns")
    return remedy + "; a column for notes needs another name" if columns.others else remedy


def _row(
    name: str, line: int, header: Sequence[str], cells: Sequence[str], faults: list[Fault]
) -> Row:
    wide = len(_trimmed(cells)) > len(header)
    whole = not wide and len(cells) >= len(header)
    if not whole:
        problem = f"the row has {len(cells)} cells, the header {len(header)}"
        remedy = "give each column one cell; put a cell that holds a comma in double quotes"
        faults.append(Fault(name, problem, remedy, line))
    named: dict[str, str] = {}
    for column, cell in zip(header, cells, strict=False):
        if column:
            named.setdefault(column, cell)
        elif cell and whole:
            problem = f"the cell '{cell}' stands under no column name"
            faults.append(Fault(name, problem, "name the column in the first row", line))
    return Row(line, named, whole)


class Cells:
    """The cells of one row as values. A cell that is wrong is noted, and its default given."""

    def __init__(self, table: Table, row: Row, faults: list[Fault]) -> None:
        self._table, self._row, self._faults = table, row, faults
        self._bad: set[str] = set()
        self.tag = row.cells.get("tag", "")
        self.line = row.line

    def wrong(self, column: str, problem: str, remedy: str) -> None:
        """Notes a fault of one cell."""
        self._bad.add(column)
        fault = Fault(self._table.name, problem, remedy, self.line, column, self.tag or None)
        self._faults.append(fault)

    def sound(self, *columns: str) -> bool:
        """Nothing was found wrong with these cells so far."""
        return self._bad.isdisjoint(columns)

    def has(self, column: str) -> bool:
        """The table has such a column: one that is missing is a fault of the header alone."""
        return column in self._row.cells

    def text(self, column: str) -> str:
        """The cell, stripped; blank where there is no such column."""
        return self._row.cells.get(column, "")

    def name(self, column: str, *, needed: bool = False) -> str:
        """A tag: one line of text without control characters; ``needed``: not blank."""
        text = self.text(column)
        if needed and not text and self.has(column):
            self.wrong(column, "is blank", "each row needs one")
        elif _CONTROL.search(text):
            self.wrong(column, f"{text!r} holds a line break or tab", "write the tag on one line")
        return text

    def word(self, column: str, allowed: Sequence[str], default: str) -> str:
        """One of the allowed words, in any case; the default where blank."""
        text = self.text(column)
        if not text or text.casefold() in allowed:
            return text.casefold() or default
        self.wrong(column, f"'{text}' is not a word for {column}", meant(text, allowed))
        return default

    def whole(self, column: str, default: int, least: int, most: int) -> int:
        """A whole number from ``least`` to ``most``; the default where blank."""
        text = self.text(column)
        if not text:
            return default
        if _WHOLE.fullmatch(text) and least <= int(text) <= most:
            return int(text)
        problem = f"'{text}' is not a whole number from {least} to {most}"
        self.wrong(column, problem, f"write {', '.join(map(str, range(least, most + 1)))}, or none")
        return default

    def number(self, column: str) -> float | None:
        """A finite number; None where blank or wrong."""
        text = self.text(column)
        if not text:
            return None
        if _COMMA.fullmatch(text):
            point = text.replace(",", ".")
            self.wrong(column, f"'{text}' has a decimal comma", f"write a decimal point: {point}")
        elif text.casefold().lstrip("+-") in ("inf", "infinity", "nan"):
            self.wrong(column, f"'{text}' is not a finite number", "a number, or leave it blank")
        elif not _NUMBER.fullmatch(text):
            remedy = "digits and a decimal point only: no unit, no blanks, no thousands mark"
            self.wrong(column, f"'{text}' is not a number", remedy)
        elif not math.isfinite(value := float(text)) or abs(value) > LARGEST:
            self.wrong(column, f"'{text}' is not a finite number", f"at most {LARGEST:g}")
        else:
            return value
        return None

    def bounded(
        self, column: str, *, zero: bool = False, under: float = math.inf, most: float = math.inf
    ) -> float | None:
        """A number over 0 (``zero``: or 0), under ``under``, at most ``most``; None where blank."""
        value = self.number(column)
        if value is None:
            return None
        if (value > 0 or (zero and value == 0)) and value < under and value <= most:
            return value
        allowed = "0 or more" if zero else "over 0"
        allowed += f", under {under:g}" if under < math.inf else ""
        allowed += f", at most {most:g}" if most < math.inf else ""
        self.wrong(column, f"{self.text(column)} is out of range", f"a number {allowed}")
        return None
