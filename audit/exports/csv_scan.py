"""Where rows and cells stand in the bytes of a CSV text. For numba to compile.

RFC 4180: a cell that begins with a quote may hold delimiters, newlines and doubled quotes; what
follows its closing quote is text. A newline is LF, CR LF or CR. Empty lines are no rows.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Octets = NDArray[np.uint8]
Codes = NDArray[np.int32]
Wholes = NDArray[np.int64]

FOUND, BEHIND, UNCLOSED, LONG = 0, 1, 2, 3
"""Places in ``totals``: number of rows, the end of the last whole one; starts or -1: of the row in
which a quoted cell is not closed, of the first row that is too long."""

_LF, _CR, _QUOTE = 10, 13, 34


def ends(octet: int, delimiter: int) -> bool:
    """Whether a byte ends a cell that is not quoted."""
    return (octet == delimiter) | (octet == _LF) | (octet == _CR)


def cell_end(data: Octets, i: int, end: int, delimiter: int) -> int:
    """The end of the cell that begins at ``i``, whatever it holds; ``end`` if it is not ended."""
    if i < 0:
        return i
    if i < end and data[i] == _QUOTE:
        i = _closed(data, i + 1, end)
    while i < end and not ends(data[i], delimiter):
        i += 1
    return i


def _closed(data: Octets, i: int, end: int) -> int:
    """Behind the quote that closes a quoted cell; end + 1 where none does."""
    if i < 0:
        return i
    while i < end:
        if data[i] == _QUOTE:
            i += 1
            if i >= end or data[i] != _QUOTE:
                return i
        i += 1
    return end + 1


def find_rows(
    data: Octets,
    at: int,
    end: int,
    final: bool,
    delimiter: int,
    longest: int,
    starts: Wholes,
    totals: Wholes,
) -> None:
    """The rows in data[at:end], as many as there is room for in ``starts``.

    ``final``: the text ends there; else its last row is a row only with its newline, and with the
    byte behind a CR. ``longest``: bytes of a row without its newline.
    """
    totals[FOUND], totals[BEHIND], totals[UNCLOSED], totals[LONG] = 0, at, -1, -1
    i = at
    while i < end and totals[FOUND] < len(starts):
        start = i
        i = cell_end(data, i, end, delimiter)
        while i < end and data[i] == delimiter:
            i = cell_end(data, i + 1, end, delimiter)
        if i > end:
            totals[UNCLOSED] = start
        if min(i, end) - start > longest and totals[LONG] < 0:
            totals[LONG] = start
        known = final or i + 1 < end or (i < end and data[i] == _LF)
        if i > end or not known:
            break
        if i > start:
            starts[totals[FOUND]] = start
            totals[FOUND] += 1
        if i < end:
            i += 2 if data[i] == _CR and i + 1 < end and data[i + 1] == _LF else 1
        totals[BEHIND] = i


def find_cells(
    data: Octets,
    end: int,
    delimiter: int,
    starts: Codes,
    rows: Wholes,
    place: int,
    at: Codes,
    length: Codes,
) -> None:
    """Of each of ``rows`` the text in column ``place``: where it stands, without its quotes.

    For texts without doubled quotes.
    """
    for k in range(len(rows)):
        i = starts[rows[k]]
        for _ in range(place):
            i = cell_end(data, i, end, delimiter) + 1
        stop = cell_end(data, i, end, delimiter)
        quoted = data[i] == _QUOTE
        at[k] = i + 1 if quoted else i
        length[k] = stop - i - 2 if quoted else stop - i


def gather(data: Octets, at: Codes, length: Codes, edges: Codes, joined: Octets) -> None:
    """Texts one behind the other: text k to joined[edges[k]:edges[k + 1]]."""
    edges[0] = 0
    for k in range(len(at)):
        edges[k + 1] = edges[k] + length[k]
        for i in range(length[k]):
            joined[edges[k] + i] = data[at[k] + i]


def settle(
    value: NDArray[np.float64],
    held: NDArray[np.int8],
    unread: int,
    text_value: NDArray[np.float64],
    text_held: NDArray[np.int8],
) -> int:
    """One column's cells that are ``unread``: what their texts are; how many are no value."""
    without = 0
    for row in range(len(held)):
        if held[row] == unread:
            code = np.int64(value[row])
            value[row], held[row] = text_value[code], text_held[code]
            without += held[row] != 0
    return without
