"""Rows of CSV text as bytes come in; doubles and coded texts in given arrays go out.

For numba to compile. ``data`` has a newline behind its last row, so that no loop runs past it. What
is not known here is left alone: a cell that is no plain number becomes a coded text, and a quoted
cell with a quote, a newline or other text in or behind it ends the reading with ODD_QUOTES. A
quoted cell is else as good as one that is not.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from audit.exports.csv_double import double
from audit.exports.csv_scan import Codes, Octets, Wholes, cell_end, ends

SKIPPED, NUMBER, TEXT, TIME = 0, 1, 2, 3
"""What is made of a column."""
DONE, FULL, TOO_LONG, ODD_QUOTES = 0, 1, 2, 3
"""How reading ended; FULL: more different texts than there is room for."""
ROWS, RAGGED, TEXTS, RUNS, STATE, WHERE = 0, 1, 2, 3, 4, 5
"""Places in ``totals``; WHERE: start of the row that is TOO_LONG."""
BLANK, UNREAD = 1, 3
"""In ``held``: there is no text; ``value`` is the code of a text. A number is 0."""
BLANKS, UNREADS, CHANGED = 0, 1, 2
"""Rows of ``counts``."""
AT, LENGTH, FLAGS, FOLLOWS = 0, 1, 2, 3
"""Rows of ``texts``."""
IS_UNREAD = 1
"""Flag of a text in an UNREAD cell."""
RAGGED_SHOWN = 5

_LF, _CR, _QUOTE, _PLUS, _MINUS, _ZERO, _NINE, _E = 10, 13, 34, 43, 45, 48, 57, 101
_NOTHING, _STOPPED = -1, -2
_MOST_DIGITS = 19
_MOST_PROBES = 64
_LARGEST = 1e30
_U0, _U10, _U32 = np.uint64(0), np.uint64(10), np.uint64(32)
_HASH, _PRIME = np.uint64(0xCBF29CE484222325), np.uint64(0x100000001B3)


class Work(NamedTuple):
    """What ``read_rows`` reads and fills; arrays are C-contiguous.

    Read: ``data``, the marks in it as bytes, ``longest`` bytes of a row; of each column of the file
    its ``kind`` [columns] and ``place`` [columns] among those of that kind.
    Filled by row [room]: ``starts`` in data; ``value``, ``held`` [number columns, room]; ``codes``
    [text columns, room], -1 where there is no text; ``run``, the same of the time column.
    ``counts`` [3, number or text columns]: BLANKS, UNREADS of a number column; CHANGED: not every
    row of a text column holds the same.
    ``texts`` [4, texts]: where the different texts stand, what they are, which one came next the
    last time; ``runs`` [2, room] those of the time column, one for each run of rows with the same;
    ``slots`` [a power of two]: code + 1 of a text by its hash, open addressing, 0: free.
    ``ragged`` [RAGGED_SHOWN, 2]: start and number of cells. ``totals`` [6].
    """

    data: Octets
    delimiter: int
    decimal: int
    longest: int
    kind: NDArray[np.int8]
    place: Codes
    starts: Codes
    value: NDArray[np.float64]
    held: NDArray[np.int8]
    codes: Codes
    run: Codes
    last: Codes
    counts: Codes
    texts: Codes
    runs: Codes
    slots: Codes
    ragged: Wholes
    totals: Wholes


def read_rows(work: Work, at: int, end: int) -> None:
    """The rows in data[at:end]; ``totals`` says how many and how it ended."""
    data, totals = work.data, work.totals
    work.last[:] = _NOTHING
    row, i = 0, at
    while i < end:
        if data[i] == _LF or data[i] == _CR:
            i += 1
            continue
        start = i
        i, cells = _row(work, i, end, row)
        if i < 0:
            return
        if i - start > work.longest:
            totals[STATE], totals[WHERE] = TOO_LONG, start
            return
        if cells == len(work.kind):
            work.starts[row] = start
            row += 1
            totals[ROWS] = row
        else:
            _set_aside(work, row, start, cells)


def _row(work: Work, i: int, end: int, row: int) -> tuple[int, int]:
    """The end of a row and its number of cells; -1 where reading has to stop."""
    width, c = len(work.kind), 0
    while True:
        kind = work.kind[c] if c < width else SKIPPED
        if kind == NUMBER:
            i = _put_number(work, i, work.place[c], row)
        elif kind == SKIPPED:
            i = cell_end(work.data, i, end, work.delimiter)
        elif kind == TEXT:
            i = _put_text(work, i, work.place[c], row)
        else:
            i, code = _time(work.data, i, work.delimiter, work.runs, work.totals)
            work.run[row] = code
        if i < 0:
            return -1, c
        c += 1
        if work.data[i] != work.delimiter:
            return i, c
        i += 1


def _put_number(work: Work, i: int, place: int, row: int) -> int:
    """A cell of a number column; returns its end or -1."""
    stop, number = _number(work.data, i, work.delimiter, work.decimal)
    if stop >= 0:
        work.value[place, row], work.held[place, row] = number, 0
        return stop
    texts, counts = work.texts, work.counts
    stop, code = _text(work.data, i, work.delimiter, _NOTHING, texts, work.slots, work.totals)
    if code < 0:
        work.value[place, row], work.held[place, row] = 0.0, BLANK
        counts[BLANKS, place] += 1
    else:
        work.value[place, row], work.held[place, row] = code, UNREAD
        counts[UNREADS, place] += 1
        texts[FLAGS, code] |= IS_UNREAD
    return stop


def _put_text(work: Work, i: int, place: int, row: int) -> int:
    """A cell of a text column; returns its end or -1."""
    before = work.last[place]
    stop, code = _text(work.data, i, work.delimiter, before, work.texts, work.slots, work.totals)
    if code >= 0:
        work.last[place] = code
    work.codes[place, row] = code
    if row > 0 and code != work.codes[place, row - 1]:
        work.counts[CHANGED, place] = 1
    return stop


def _set_aside(work: Work, row: int, start: int, cells: int) -> None:
    """Take a row of another width out of the counts; the next row takes its place."""
    for c in range(min(cells, len(work.kind))):
        if work.kind[c] == NUMBER:
            held = work.held[work.place[c], row]
            if held == BLANK:
                work.counts[BLANKS, work.place[c]] -= 1
            elif held == UNREAD:
                work.counts[UNREADS, work.place[c]] -= 1
    if work.totals[RAGGED] < RAGGED_SHOWN:
        work.ragged[work.totals[RAGGED], 0] = start
        work.ragged[work.totals[RAGGED], 1] = cells
    work.totals[RAGGED] += 1


def _number(data: Octets, i: int, delimiter: int, decimal: int) -> tuple[int, float]:
    """The end of a cell with a plain number, and the number; -1 where it is none."""
    if i < 0:
        return -1, 0.0
    quoted = data[i] == _QUOTE
    if quoted:
        i += 1
    negative = data[i] == _MINUS
    if negative or data[i] == _PLUS:
        i += 1
    mantissa, first = _U0, i
    while _ZERO <= data[i] <= _NINE:
        mantissa = mantissa * _U10 + np.uint64(data[i] - _ZERO)
        i += 1
    digits, power = i - first, 0
    if data[i] == decimal:
        i += 1
        first = i
        while _ZERO <= data[i] <= _NINE:
            mantissa = mantissa * _U10 + np.uint64(data[i] - _ZERO)
            i += 1
        power = first - i
        digits -= power
    if digits <= 0 or digits > _MOST_DIGITS:
        return -1, 0.0
    if data[i] | 32 == _E:
        i, power = _exponent(data, i, power)
    if quoted:
        if data[i] != _QUOTE:
            return -1, 0.0
        i += 1
    if not ends(data[i], delimiter):
        return -1, 0.0
    size = double(mantissa, power)
    if size <= _LARGEST:
        return i, -size if negative else size
    return -1, 0.0


def _exponent(data: Octets, i: int, power: int) -> tuple[int, int]:
    """Behind an exponent, and the power of ten with it; where there is none all is left as is."""
    if i < 0:
        return -1, power
    k = i + 1
    negative = data[k] == _MINUS
    if negative or data[k] == _PLUS:
        k += 1
    first, exponent = k, 0
    while _ZERO <= data[k] <= _NINE and k - first < 5:
        exponent = exponent * 10 + data[k] - _ZERO
        k += 1
    if k == first:
        return i, power
    return k, power - exponent if negative else power + exponent


def _inner_end(data: Octets, i: int, quoted: bool, delimiter: int) -> int:
    """The end of the text of a cell, before a closing quote; -1: quotes used in an odd way."""
    if i < 0:
        return -1
    if not quoted:
        while not ends(data[i], delimiter):
            i += 1
        return i
    while data[i] != _QUOTE and data[i] != _LF and data[i] != _CR:
        i += 1
    return i if data[i] == _QUOTE and ends(data[i + 1], delimiter) else -1


def _text(
    data: Octets, i: int, delimiter: int, before: int, texts: Codes, slots: Codes, totals: Wholes
) -> tuple[int, int]:
    """The end of a cell and its text's code (_NOTHING: blank), or -1 and _STOPPED.

    ``before``: the code before it in its column; what followed that the last time is tried first.
    """
    if i < 0:
        return -1, _STOPPED
    quoted = data[i] == _QUOTE
    if quoted:
        i += 1
    if before >= 0:
        code = int(texts[FOLLOWS, before])
        behind = _again(data, i, quoted, texts[AT, code], texts[LENGTH, code], delimiter)
        if behind >= 0:
            return behind, code
    stop = _inner_end(data, i, quoted, delimiter)
    if stop < 0:
        totals[STATE] = ODD_QUOTES
        return -1, _STOPPED
    behind = stop + 1 if quoted else stop
    if stop == i:
        return behind, _NOTHING
    code = _code(data, i, stop, texts, slots, totals)
    if code < 0:
        totals[STATE] = FULL
        return -1, _STOPPED
    if before >= 0:
        texts[FOLLOWS, before] = code
    return behind, code


def _time(data: Octets, i: int, delimiter: int, runs: Codes, totals: Wholes) -> tuple[int, int]:
    """The end of a cell of the time column and its code: that of the row before, or a new one."""
    if i < 0:
        return -1, _STOPPED
    quoted = data[i] == _QUOTE
    if quoted:
        i += 1
    code = int(totals[RUNS]) - 1
    if code >= 0:
        behind = _again(data, i, quoted, runs[AT, code], runs[LENGTH, code], delimiter)
        if behind >= 0:
            return behind, code
    stop = _inner_end(data, i, quoted, delimiter)
    if stop < 0:
        totals[STATE] = ODD_QUOTES
        return -1, _STOPPED
    behind = stop + 1 if quoted else stop
    if stop == i:
        return behind, _NOTHING
    code += 1
    runs[AT, code], runs[LENGTH, code] = i, stop - i
    totals[RUNS] += 1
    return behind, code


def _again(data: Octets, i: int, quoted: bool, at: int, length: int, delimiter: int) -> int:
    """The cell's end where it holds the text of an earlier one, quoted as that was; else -1."""
    if (data[at - 1] == _QUOTE) != quoted:
        return -1
    stop = _same(data, i, at, length)
    if stop < 0 or (quoted and data[stop] != _QUOTE):
        return -1
    behind = stop + 1 if quoted else stop
    return behind if ends(data[behind], delimiter) else -1


def _same(data: Octets, i: int, at: int, length: int) -> int:
    """The end of the text at ``i`` where it begins as the one at ``at`` does; else -1."""
    if i < 0 or at < 0:
        return -1
    for k in range(length):
        if data[i + k] != data[at + k]:
            return -1
    return i + length


def _code(data: Octets, start: int, stop: int, texts: Codes, slots: Codes, totals: Wholes) -> int:
    """The code of a text, a new one where it was not met before; -1: no room."""
    if start < 0:
        return -1
    mixed, length = _HASH, stop - start
    for k in range(start, stop):
        mixed = (mixed ^ np.uint64(data[k])) * _PRIME
    slot = int(np.int64((mixed ^ (mixed >> _U32)) & np.uint64(len(slots) - 1)))
    for _ in range(_MOST_PROBES):
        code = int(slots[slot]) - 1
        if code < 0:
            code = int(totals[TEXTS])
            if code == texts.shape[1]:
                return -1
            totals[TEXTS] += 1
            texts[AT, code], texts[LENGTH, code] = start, length
            texts[FLAGS, code], texts[FOLLOWS, code] = 0, code
            slots[slot] = code + 1
            return code
        if texts[LENGTH, code] == length and _same(data, start, texts[AT, code], length) >= 0:
            return code
        slot = (slot + 1) & (len(slots) - 1)
    return -1


WITHIN = (_row, _put_number, _put_text, _number, _inner_end, _text, _time, _again, _same)
"""What ``read_rows`` calls for most cells, to be compiled into it."""
BESIDE = (_set_aside, _exponent, _code)
"""What it calls for few."""


def no_work() -> Work:
    """Work without a row, for its types."""
    octets, held = np.zeros(1, np.uint8), np.zeros(1, np.int8)
    codes, wholes, floats = np.zeros(1, np.int32), np.zeros(1, np.int64), np.zeros((1, 1))
    table, held_table = codes.reshape(1, 1), held.reshape(1, 1)
    by_row = (codes, floats, held_table, table, codes)
    by_text = (table, table, codes, wholes.reshape(1, 1), wholes)
    return Work(octets, 0, 0, 0, held, codes, *by_row, codes, table, *by_text)
