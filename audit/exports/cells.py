"""Cells of one column come in as an Arrow array, numbers or texts go out, each cell told apart.

Text is parsed to the nearest double. What is no decimal number of up to LARGEST (words, NaN and
Inf, a historian's fill value such as 3.4e38, another decimal or thousands mark than the declared
one) costs its cell, never the row. The declared words for true and false are 1 and 0.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from audit.records import ExportSource

_NUMBER = r"^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?$"
_PLAIN = re.compile(_NUMBER)
_EXACT = 2.0**53

LARGEST = 1e30
"""Numbers beyond it are fill values, not readings; keeps what is reckoned with them finite."""


class Cell(IntEnum):
    """What a cell holds."""

    VALUE = 0
    BLANK = 1
    NOT_A_NUMBER = 2


@dataclass(frozen=True, eq=False)
class Cells:
    """One column's cells [n]: ``value`` (0.0 where there is none) and what each cell holds.

    With ``texts`` set, ``value`` is an index into them. ``all_values``: each cell is known to hold
    a value; where it is False nobody has looked.
    """

    value: NDArray[np.float64]
    held: NDArray[np.int8]
    texts: tuple[str, ...] | None = None
    all_values: bool = False

    def part(self, start: int, stop: int) -> Cells:
        """Cells start..stop-1."""
        return Cells(self.value[start:stop], self.held[start:stop], self.texts, self.all_values)

    def take(self, rows: NDArray[np.int64]) -> Cells:
        """The cells of these rows, in this order; of row -1 a blank one."""
        if len(self.value) == 0:
            return Cells(np.zeros(len(rows)), np.full(len(rows), np.int8(Cell.BLANK)), self.texts)
        value, held = self.value[rows], self.held[rows]
        none = rows < 0
        if none.any():
            value[none], held[none] = 0.0, Cell.BLANK
        return Cells(value, held, self.texts, self.all_values and not none.any())


def read_numbers(column: Any, source: ExportSource) -> Cells:
    """A column of numbers as the source writes them."""
    words = dict.fromkeys(map(str.casefold, source.false_words), 0.0)
    words |= dict.fromkeys(map(str.casefold, source.true_words), 1.0)
    return numbers(column, source.decimal, source.thousands, words)


def numbers(
    column: Any, decimal: str, thousands: str = "", words: Mapping[str, float] | None = None
) -> Cells:
    """A column of numbers; ``decimal`` is the decimal mark of its texts.

    ``thousands``: the mark between groups of three digits before it, "": none. ``words``, in
    lower case (str.casefold), are read as the numbers given.
    """
    kind = column.type
    if pa.types.is_dictionary(kind):
        return numbers(column.dictionary, decimal, thousands, words).take(_codes(column))
    if _is_text(kind):
        column = _trimmed(column)
        plain = _ungrouped(column, decimal, thousands) if thousands else column
        return _with_words(_parsed(plain, decimal), column, words or {})
    if pa.types.is_floating(kind) or pa.types.is_integer(kind) or pa.types.is_decimal(kind):
        return _typed(pc.cast(column, pa.float64(), safe=False), column)
    if pa.types.is_boolean(kind):
        return _typed(pc.cast(pc.cast(column, pa.int8()), pa.float64()), column)
    held = np.where(_valid(column), np.int8(Cell.NOT_A_NUMBER), np.int8(Cell.BLANK))
    return Cells(np.zeros(len(column)), held)


def words(column: Any, decimal: str) -> Cells:
    """A column of texts (modes): values are indices into ``texts``, which are sorted.

    Texts are stripped; numbers become their shortest text, so that 1, 1.0 and "1.0" are all "1".
    """
    if not (pa.types.is_dictionary(column.type) and _is_text(column.type.value_type)):
        column = as_texts(column).dictionary_encode()
    return coded_words(column.dictionary.to_pylist(), _codes(column), decimal)


def coded_words(given: Sequence[str | None], code: NDArray[np.int64], decimal: str) -> Cells:
    """As ``words``, of texts ``given`` and each cell's index into them (-1: none)."""
    used = np.bincount(code + 1, minlength=len(given) + 1)[1:]
    canonical = [
        canonical_text(text, decimal) if text and count else ""
        for text, count in zip(given, used.tolist(), strict=True)
    ]
    texts = tuple(sorted({text for text in canonical if text}))
    place = {text: at for at, text in enumerate(texts)}
    value = np.array([*(place.get(text, -1) for text in canonical), -1], np.float64)[code]
    blank = value < 0
    all_values = not blank.any()
    return Cells(np.where(blank, 0.0, value), blank.astype(np.int8), texts, all_values)


def canonical_text(text: str, decimal: str = ".") -> str:
    """The text itself, stripped; of a number its shortest form ("1" for "1.0", "0.5" for ".50")."""
    text = text.strip()
    plain = text.replace(decimal, ".") if decimal != "." and "." not in text else text
    if _PLAIN.match(plain) is None or (decimal != "." and "." in text):
        return text
    number = float(plain)
    return str(int(number)) if number.is_integer() and abs(number) < _EXACT else repr(number)


def as_texts(column: Any) -> Any:
    """Any column as texts: decoded, numbers as they print, nothing where there is nothing."""
    kind = column.type
    if pa.types.is_dictionary(kind):
        return as_texts(pc.cast(column, kind.value_type))
    if pa.types.is_string(kind):
        return column
    try:
        return pc.cast(column, pa.string())
    except (pa.ArrowNotImplementedError, pa.ArrowInvalid):
        texts = [None if cell is None else str(cell) for cell in column.to_pylist()]
        return pa.array(texts, pa.string())


def _codes(column: Any) -> NDArray[np.int64]:
    """Each cell's index into the dictionary, -1 where there is none."""
    indices = pc.cast(column.indices, pa.int64())
    codes: NDArray[np.int64] = pc.fill_null(indices, -1).to_numpy(zero_copy_only=False)
    return codes


def _is_text(kind: Any) -> bool:
    return bool(pa.types.is_string(kind) or pa.types.is_large_string(kind))


def _valid(column: Any) -> NDArray[np.bool_]:
    valid: NDArray[np.bool_] = column.is_valid().to_numpy(zero_copy_only=False)
    return valid


def _typed(value: Any, column: Any) -> Cells:
    valid = _valid(column)
    number = pc.fill_null(value, 0.0).to_numpy(zero_copy_only=False)
    finite = np.isfinite(number) & (np.abs(number) <= LARGEST)
    held = np.where(valid, np.int8(Cell.VALUE), np.int8(Cell.BLANK))
    held[~finite] = Cell.NOT_A_NUMBER
    return Cells(np.where(finite, number, 0.0), held)


def _trimmed(column: Any) -> Any:
    """Without outer white space where there is any; what is left empty becomes nothing."""
    odd = pc.any(pc.match_substring_regex(column, r"^\s|\s$|^$")).as_py()
    if not odd:
        return column
    column = pc.utf8_trim_whitespace(column)
    return pc.if_else(
        pc.equal(column, pa.scalar("", column.type)), pa.scalar(None, column.type), column
    )


def _ungrouped(column: Any, decimal: str, thousands: str) -> Any:
    """Numbers with thousands marks where they belong without them; all else as it is."""
    if not pc.any(pc.match_substring(column, thousands)).as_py():
        return column
    mark, point = re.escape(thousands), re.escape(decimal)
    grouped = rf"^[+-]?[0-9]{{1,3}}({mark}[0-9]{{3}})+({point}[0-9]*)?([eE][+-]?[0-9]+)?$"
    bare = pc.replace_substring(column, thousands, "")
    return pc.if_else(pc.match_substring_regex(column, grouped), bare, column)


def _with_words(cells: Cells, column: Any, words: Mapping[str, float]) -> Cells:
    """With the numbers that ``words`` stand for, in the cells that hold no number."""
    rows = np.flatnonzero(cells.held == Cell.NOT_A_NUMBER)
    if not words or len(rows) == 0:
        return cells
    coded = column.take(pa.array(rows)).dictionary_encode()
    found = [words.get(text.casefold(), np.nan) for text in coded.dictionary.to_pylist()]
    number = np.array(found)[coded.indices.to_numpy()]
    known = ~np.isnan(number)
    value, held = cells.value.copy(), cells.held.copy()
    value[rows[known]], held[rows[known]] = number[known], Cell.VALUE
    return Cells(value, held)


def _parsed(column: Any, decimal: str) -> Cells:
    given = column
    if decimal != ".":
        other = pc.match_substring(column, ".")
        column = pc.if_else(other, pa.scalar("-", column.type), column)
        column = pc.replace_substring(column, decimal, ".")
    try:
        return _typed(pc.cast(column, pa.float64()), given)
    except pa.ArrowInvalid:
        number = pc.match_substring_regex(column, _NUMBER)
        column = pc.if_else(number, column, pa.scalar(None, column.type))
    cells = _typed(pc.cast(column, pa.float64()), given)
    refused = _valid(given) & ~pc.fill_null(number, False).to_numpy(zero_copy_only=False)
    cells.held[refused] = Cell.NOT_A_NUMBER
    return cells
