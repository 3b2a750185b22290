"""Cells of one column come in as an Arrow array, numbers or texts go out, each cell told apart.

Text is parsed to the nearest double. What is no decimal number of up to LARGEST (words, NaN and
Inf, a historian's fill value such as 3.4e38, a thousands separator, another decimal mark than the
declared one) costs its cell, never the row.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from enum import IntEnum
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

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

    With ``texts`` set, ``value`` is an index into them.
    """

    value: NDArray[np.float64]
    held: NDArray[np.int8]
    texts: tuple[str, ...] | None = None

    def part(self, start: int, stop: int) -> Cells:
        """Cells start..stop-1."""
        return Cells(self.value[start:stop], self.held[start:stop], self.texts)


def numbers(column: Any, decimal: str) -> Cells:
    """A column of numbers; ``decimal`` is the decimal mark of its texts."""
    kind = column.type
    if pa.types.is_dictionary(kind):
        return numbers(pc.cast(column, kind.value_type), decimal)
    if _is_text(kind):
        return _parsed(_trimmed(column), decimal)
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
    coded = as_texts(column).dictionary_encode()
    canonical = [canonical_text(text, decimal) for text in coded.dictionary.to_pylist()]
    texts = tuple(sorted({text for text in canonical if text}))
    place = {text: at for at, text in enumerate(texts)}
    index = np.array([place.get(text, -1) for text in canonical] or [-1], np.int64)
    code = pc.fill_null(coded.indices, -1).to_numpy(zero_copy_only=False)
    value = np.where(code < 0, -1, index[code])
    held = np.where(value < 0, np.int8(Cell.BLANK), np.int8(Cell.VALUE))
    return Cells(np.maximum(value, 0).astype(np.float64), held, texts)


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
