"""A stream of bytes comes in; blocks of whole CSV rows go out, with where they stand in the file.

Cut at the last newline of what was read; where a quote or a lone CR was seen, the rows are followed
one by one, so that no cut lies inside a quoted cell or between CR and LF.
"""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports.csv_compiled import compile_kernels
from audit.exports.csv_memory import Memory
from audit.exports.csv_scan import BEHIND, LONG, UNCLOSED

_READ_BYTES = 1 << 20
_LOOK_BACK = 1 << 16
_LARGEST_BLOCK = 1 << 30
_LF, _CR = 10, 13


class Stream(Protocol):
    """What blocks are read from."""

    def read(self, size: int, /) -> bytes:
        """At most ``size`` bytes; none at the end."""


@dataclass(frozen=True)
class Seen:
    """What stands in some bytes: newlines LF, CR and CR LF counted; the others at least perhaps."""

    lf: int = 0
    cr: int = 0
    crlf: int = 0
    quotes: bool = False
    odd_bytes: bool = False

    @property
    def lines(self) -> int:
        """Newlines of any kind."""
        return self.lf + self.cr - self.crlf

    @property
    def lone_cr(self) -> bool:
        return self.cr > self.crlf

    def less(self, other: Seen) -> Seen:
        """Without the newlines of a part of the bytes."""
        return replace(
            self, lf=self.lf - other.lf, cr=self.cr - other.cr, crlf=self.crlf - other.crlf
        )

    def plus(self, other: Seen) -> Seen:
        return Seen(
            self.lf + other.lf,
            self.cr + other.cr,
            self.crlf + other.crlf,
            self.quotes or other.quotes,
            self.odd_bytes or other.odd_bytes,
        )


@dataclass(frozen=True, eq=False)
class Block:
    """Whole rows: data[at:end]. In front of ``at`` and at ``end`` stands a newline of our own.

    ``first_byte``: offset in the file of data[1]; ``first_line``: line on which data[1] stands.
    """

    data: NDArray[np.uint8]
    at: int
    end: int
    first_byte: int
    first_line: int
    seen: Seen

    def line_at(self, place: int) -> int:
        """Line in the file of a place in the data, from 1."""
        return self.first_line + look(self.data, 1, place).lines


def look(data: NDArray[np.uint8], at: int, end: int) -> Seen:
    """What stands in data[at:end]; data[at - 1] is looked at for a CR LF."""
    return _seen(data[at:end].tobytes(), bool(data[at - 1] == _CR))


def _seen(text: bytes, after_cr: bool) -> Seen:
    """What stands in a text, by searches that are much faster than a look at each byte."""
    lines = int(np.count_nonzero(np.frombuffer(text, np.uint8) == _LF))
    odd = not text.isascii() or b"\0" in text
    cr, crlf = 0, int(after_cr and text[:1] == b"\n")
    if b"\r" in text:
        cr, crlf = text.count(b"\r"), crlf + text.count(b"\r\n")
    return Seen(lines, cr, crlf, b'"' in text, odd)


def check_text(block: Block, path: str, final: bool = True) -> None:
    """Refuse NUL bytes and what is not UTF-8; not ``final``: a character may be cut at the end."""
    text = block.data[1 : block.end].tobytes()
    nul = text.find(b"\0")
    broken, what = nul, "a NUL byte"
    try:
        codecs.utf_8_decode(text, "strict", final)
    except UnicodeDecodeError as error:
        broken = error.start if nul < 0 else min(nul, error.start)
        what = "a NUL byte" if broken == nul else f"byte 0x{text[broken]:02x}, not UTF-8,"
    if broken >= 0:
        raise ExportRefused(
            path,
            f"{what} at byte {block.first_byte + broken + 1}",
            "export it again as text in UTF-8",
            block.line_at(broken + 1),
        )


def too_long(block: Block, start: int, longest: int, path: str) -> ExportRefused:
    """What to say of a row that begins at ``start``."""
    return ExportRefused(
        path,
        f"a row is longer than {longest} bytes",
        "see whether a quoted cell is not closed there, or raise longest_row_kb in [intake]",
        block.line_at(start),
    )


class Cutter:
    """Cuts one file into blocks of about ``piece_bytes``, more only where a row is longer."""

    def __init__(
        self, stream: Stream, delimiter: int, longest: int, path: str, piece_bytes: int
    ) -> None:
        self._stream = stream
        self._delimiter = delimiter
        self._longest = min(longest, _LARGEST_BLOCK)
        self._path = path
        self._piece = max(1, piece_bytes)
        self._final = False

    def blocks(self, memory: Memory) -> Iterator[Block]:
        """The blocks in order, none without a byte. Raises ExportRefused."""
        block = Block(self._fresh(memory, 0), 1, 1, 0, 1, Seen())
        while not self._final:
            block = self._filled(block, self._piece, memory)
            cut = self._cut(block)
            while cut == 1 and not self._final:
                block = self._filled(block, 2 * block.end, memory)
                cut = self._cut(block)
            rest = look(block.data, cut, block.end)
            data = self._fresh(memory, block.end - cut)
            data[1 : 1 + block.end - cut] = block.data[cut : block.end]
            block.data[cut] = _LF
            whole = replace(block, end=cut, seen=block.seen.less(rest))
            line = block.first_line + whole.seen.lines
            block = Block(data, 1, 1 + block.end - cut, block.first_byte + cut - 1, line, rest)
            if cut > 1:
                yield whole

    def _fresh(self, memory: Memory, held: int) -> NDArray[np.uint8]:
        data = memory.lend(max(self._piece, held) + 3)
        data[0] = _LF
        return data

    def _filled(self, block: Block, size: int, memory: Memory) -> Block:
        """The block with the next bytes of the file, ``size`` in all if there are as many."""
        data, end, seen = block.data, block.end, block.seen
        if len(data) < size + 3:
            data = memory.lend(size + 3)
            data[:end] = block.data[:end]
        while end <= size and not self._final:
            more = self._stream.read(min(_READ_BYTES, size + 1 - end))
            self._final = not more
            data[end : end + len(more)] = np.frombuffer(more, np.uint8)
            seen = seen.plus(_seen(more, bool(data[end - 1] == _CR)))
            end += len(more)
        at = 4 if block.first_byte == 0 and data[1:4].tobytes() == codecs.BOM_UTF8 else 1
        return replace(block, data=data, at=min(at, end), end=end, seen=seen)

    def _cut(self, block: Block) -> int:
        """Where the last whole row ends, 1 where there is none."""
        pending = int(not self._final and block.data[block.end - 1] == _CR)
        if block.seen.quotes or block.seen.cr - pending > block.seen.crlf:
            return self._followed(block)
        if self._final:
            return block.end
        cut = _last_newline(block) + 1
        if cut == 1 and block.end - 1 - pending > self._longest:
            raise self._refused(block, too_long(block, block.at, self._longest, self._path))
        return cut

    def _followed(self, block: Block) -> int:
        """The same, row by row."""
        starts, totals = np.empty(block.seen.lines + 2, np.int64), np.empty(4, np.int64)
        compile_kernels().find_rows(
            *(block.data, block.at, block.end, self._final),
            *(self._delimiter, self._longest, starts, totals),
        )
        if totals[LONG] >= 0:
            error = too_long(block, int(totals[LONG]), self._longest, self._path)
            raise self._refused(block, error)
        if self._final and totals[UNCLOSED] >= 0:
            line = block.line_at(int(totals[UNCLOSED]))
            remedy = "the file is cut short; export it again"
            error = ExportRefused(self._path, "a quoted cell is not closed", remedy, line)
            raise self._refused(block, error)
        return block.end if self._final else max(1, int(totals[BEHIND]))

    def _refused(self, block: Block, error: ExportRefused) -> ExportRefused:
        """The error, unless the file is no text at all."""
        check_text(block, self._path, self._final)
        return error


def _last_newline(block: Block) -> int:
    """Place of the last LF, 0 where there is none."""
    stop = block.end
    while stop > 1:
        start = max(1, stop - _LOOK_BACK)
        found = block.data[start:stop].tobytes().rfind(b"\n")
        if found >= 0:
            return start + found
        stop = start
    return 0
