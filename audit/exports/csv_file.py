"""The content of a CSV file comes in as a stream, Sheets of its rows go out, piece by piece.

RFC 4180 with a declared delimiter: quoted cells may hold delimiters, newlines and doubled quotes.
Text is UTF-8, with or without a byte order mark. The first row that is not empty is the header.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Generator, Iterable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import replace
from itertools import chain

import numpy as np

from audit.errors import ExportRefused
from audit.exports.csv_blocks import Block, Cutter, Stream, check_text, too_long
from audit.exports.csv_compiled import compile_kernels
from audit.exports.csv_memory import Memory
from audit.exports.csv_piece import sheet_of
from audit.exports.csv_plan import Plan, plan_of
from audit.exports.csv_scan import BEHIND, FOUND, LONG
from audit.exports.sheet import Sheet
from audit.records import ExportSource

_BUFFERS_KEPT = 2


def pieces(
    stream: Stream,
    source: ExportSource,
    wanted: Mapping[str, bool],
    path: str,
    threads: int = 1,
    piece_bytes: int = 32 << 20,
) -> Generator[Sheet, None, None]:
    """The asked-for columns, about ``piece_bytes`` of the file at a time, in its order.

    ``stream``: the decompressed content. ``wanted``: tag -> whether it is a mode tag, of which the
    texts are kept. At most ``threads`` + 2 pieces are held, however large the file is; 1: they are
    read by the caller's own thread. A file without a row gives one Sheet of none. Where pieces are
    cut changes nothing but the Sheets. Raises ExportRefused, in order: what comes before is given.
    """
    _check_delimiter(source, path)
    memory = Memory(_BUFFERS_KEPT * (threads + 2))
    longest = source.limits.longest_row_bytes
    cutter = Cutter(stream, ord(source.delimiter), longest, path, piece_bytes)
    blocks = cutter.blocks(memory)
    plan, first = _begun(blocks, source, wanted, path)

    def work(block: Block | ExportRefused) -> Sheet:
        if isinstance(block, ExportRefused):
            raise block
        return sheet_of(block, plan, memory)

    given, first_row = 0, 0
    last: Sheet | None = None
    for last in _in_order(chain([first], _with_refusal(blocks)), work, threads):
        if last.rows or last.ragged:
            yield replace(last, first_row=first_row)
            given, first_row = given + 1, first_row + last.rows
    if last is not None and given == 0:
        yield last


def _check_delimiter(source: ExportSource, path: str) -> None:
    if not source.delimiter.isascii():
        raise ExportRefused(
            path,
            f"its delimiter is declared as {source.delimiter!r}",
            "export it with an ASCII character between the cells, and declare that",
        )


def _begun(
    blocks: Iterator[Block], source: ExportSource, wanted: Mapping[str, bool], path: str
) -> tuple[Plan, Block]:
    """The file's header understood, and the first block without it."""
    starts, totals = np.empty(1, np.int64), np.empty(4, np.int64)
    longest = source.limits.longest_row_bytes
    for block in blocks:
        if block.seen.odd_bytes:
            check_text(block, path)
        compile_kernels().find_rows(
            *(block.data, block.at, block.end, True),
            *(ord(source.delimiter), longest, starts, totals),
        )
        if totals[LONG] >= 0:
            raise too_long(block, int(totals[LONG]), longest, path)
        if totals[FOUND]:
            start, stop = int(starts[0]), int(totals[BEHIND])
            header = block.data[start:stop].tobytes()
            plan = plan_of(header, source, wanted, path, block.line_at(start))
            return plan, replace(block, at=stop)
    raise ExportRefused(path, "the file is empty", "export it again")


def _with_refusal(blocks: Iterator[Block]) -> Iterator[Block | ExportRefused]:
    """A refusal takes its place behind the blocks before it."""
    try:
        yield from blocks
    except ExportRefused as error:
        yield error


def _in_order(
    blocks: Iterable[Block | ExportRefused],
    work: Callable[[Block | ExportRefused], Sheet],
    threads: int,
) -> Iterator[Sheet]:
    if threads <= 1:
        yield from map(work, blocks)
        return
    waiting: deque[Future[Sheet]] = deque()
    with ThreadPoolExecutor(threads) as pool:
        try:
            for block in blocks:
                waiting.append(pool.submit(work, block))
                if len(waiting) > threads:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()
