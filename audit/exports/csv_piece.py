"""A block of whole CSV rows comes in, a Sheet of its columns goes out.

By the compiled kernel; what that leaves alone (lone CR, quotes or newlines in quoted cells, more
different texts than it has room for) by pyarrow, with the same result.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from audit.exports import cells, csv_arrow
from audit.exports import csv_kernel as kernel
from audit.exports.cells import Cell, Cells
from audit.exports.csv_blocks import Block, check_text, too_long
from audit.exports.csv_columns import (
    CodedColumn,
    CodedTexts,
    ParsedColumn,
    joined_texts,
    null_where_empty,
)
from audit.exports.csv_compiled import compile_kernels
from audit.exports.csv_memory import Memory, carve, room_for
from audit.exports.csv_plan import Plan
from audit.exports.sheet import Column, RaggedRow, Sheet

_SLOTS = (1 << 14, 1 << 17, 1 << 20)
_LINE_CELLS = 8


def sheet_of(block: Block, plan: Plan, memory: Memory) -> Sheet:
    """The asked-for columns of the rows, ``first_row`` still 0. Raises ExportRefused."""
    if block.seen.odd_bytes:
        check_text(block, plan.path)
    work = None
    if plan.for_kernel and not block.seen.lone_cr:
        work = _work(block, plan, memory)
    return csv_arrow.sheet_of(block, plan) if work is None else _sheet(block, plan, work)


def _work(block: Block, plan: Plan, memory: Memory) -> kernel.Work | None:
    """The block as the kernel read it; None where it could not."""
    for slots in _SLOTS:
        work = _empty(block, plan, memory, slots)
        compile_kernels().read_rows(work, block.at, block.end)
        state = work.totals[kernel.STATE]
        if state == kernel.DONE:
            return work
        if state == kernel.TOO_LONG:
            raise too_long(block, int(work.totals[kernel.WHERE]), plan.longest, plan.path)
        if state == kernel.ODD_QUOTES:
            return None
    return None


def _empty(block: Block, plan: Plan, memory: Memory, slots: int) -> kernel.Work:
    """Room for the rows of a block. Columns lie an odd number of cache lines apart."""
    lines = (block.seen.lf + 2) // _LINE_CELLS + 1
    room = (lines | 1) * _LINE_CELLS
    numbers, texts = len(plan.numbers), len(plan.texts)
    wanted: tuple[tuple[Any, tuple[int, ...]], ...] = (
        (np.int32, (room,)),
        (np.float64, (numbers, room)),
        (np.int8, (numbers, room)),
        (np.int32, (texts, room)),
        (np.int32, (room,)),
        (np.int32, (texts,)),
        (np.int32, (3, max(numbers, texts))),
        (np.int32, (4, slots // 2)),
        (np.int32, (2, room)),
        (np.int32, (slots,)),
        (np.int64, (kernel.RAGGED_SHOWN, 2)),
        (np.int64, (6,)),
    )
    arrays = carve(memory.lend(room_for(*wanted)), *wanted)
    head = (block.data, plan.delimiter, plan.decimal, plan.longest, plan.kind, plan.place)
    work = kernel.Work(*head, *arrays)
    for counted in (work.counts, work.slots, work.totals):
        counted[:] = 0
    return work


def _sheet(block: Block, plan: Plan, work: kernel.Work) -> Sheet:
    rows, met = int(work.totals[kernel.ROWS]), int(work.totals[kernel.TEXTS])
    runs, ragged = int(work.totals[kernel.RUNS]), int(work.totals[kernel.RAGGED])
    place = work.texts[:, :met]
    texts = joined_texts(block.data, place[kernel.AT], place[kernel.LENGTH])
    stamps = joined_texts(block.data, work.runs[kernel.AT, :runs], work.runs[kernel.LENGTH, :runs])
    columns: dict[str, Column] = {
        plan.time: CodedColumn(CodedTexts(stamps), work.run[:rows], all_used=ragged == 0),
        **_numbers(block, plan, work, rows, texts),
        **_texts(plan, work, rows, CodedTexts(texts)),
    }
    starts = work.starts[:rows]
    return Sheet(
        plan.path,
        plan.names,
        {name: columns[name] for name in plan.asked},
        rows,
        lambda row: block.line_at(int(starts[row])),
        ragged,
        tuple(
            RaggedRow(block.line_at(start), found, len(plan.names))
            for start, found in work.ragged[: min(ragged, kernel.RAGGED_SHOWN)].tolist()
        ),
    )


def _numbers(
    block: Block, plan: Plan, work: kernel.Work, rows: int, texts: Any
) -> Mapping[str, Column]:
    """The number columns, their unread texts settled."""
    without = work.counts[kernel.BLANKS].copy()
    found = work.counts[kernel.UNREADS]
    if found[: len(plan.numbers)].any():
        value, held = _of_texts(plan, work, texts)
        for at in np.flatnonzero(found[: len(plan.numbers)]).tolist():
            without[at] += compile_kernels().settle(
                work.value[at, :rows], work.held[at, :rows], kernel.UNREAD, value, held
            )
    whole = work.value[:, :rows]
    return {
        name: ParsedColumn(
            Cells(whole[at], work.held[at, :rows], None, bool(without[at] == 0)),
            _Texts(block, plan.delimiter, work.starts[:rows], plan.at[name]),
            None,
            whole,
            at,
        )
        for at, name in enumerate(plan.numbers)
    }


def _of_texts(
    plan: Plan, work: kernel.Work, texts: Any
) -> tuple[NDArray[np.float64], NDArray[np.int8]]:
    """What each text is as a number; only of those that stand in a number column."""
    flags = work.texts[kernel.FLAGS, : len(texts)]
    unread = np.flatnonzero(flags & kernel.IS_UNREAD)
    read = cells.read_numbers(texts.take(pa.array(unread)), plan.source)
    value, held = np.zeros(len(texts)), np.full(len(texts), np.int8(Cell.BLANK))
    value[unread], held[unread] = read.value, read.held
    return value, held


def _texts(plan: Plan, work: kernel.Work, rows: int, texts: CodedTexts) -> Mapping[str, Column]:
    return {
        name: CodedColumn(texts, work.codes[at, :rows], bool(work.counts[kernel.CHANGED, at] == 0))
        for at, name in enumerate(plan.texts)
    }


@dataclass(frozen=True, eq=False)
class _Texts:
    """The texts of one column, found in the rows when they are asked for."""

    block: Block
    delimiter: int
    starts: NDArray[np.int32]
    place: int

    def arrow(self, rows: NDArray[np.int64] | None) -> Any:
        wanted = np.arange(len(self.starts)) if rows is None else rows
        at, length = np.empty(len(wanted), np.int32), np.empty(len(wanted), np.int32)
        compile_kernels().find_cells(
            *(self.block.data, self.block.end, self.delimiter),
            *(self.starts, wanted, self.place, at, length),
        )
        return null_where_empty(joined_texts(self.block.data, at, length))
