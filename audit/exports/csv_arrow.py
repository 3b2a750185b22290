"""A block of whole CSV rows comes in, a Sheet goes out: by pyarrow, for what the kernel leaves.

Slower, but it takes all that RFC 4180 allows, and CR as a newline.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports import cells
from audit.exports.csv_blocks import Block, too_long
from audit.exports.csv_columns import CodedColumn, CodedTexts, ParsedColumn
from audit.exports.csv_compiled import compile_kernels
from audit.exports.csv_kernel import NUMBER
from audit.exports.csv_plan import Plan
from audit.exports.csv_scan import FOUND, LONG
from audit.exports.sheet import Column, RaggedRow, Sheet

_RAGGED_SHOWN = 5


def sheet_of(block: Block, plan: Plan) -> Sheet:
    """The asked-for columns of the rows, ``first_row`` still 0. Raises ExportRefused."""
    starts = _starts(block, plan)
    ragged: list[tuple[int, int]] = []
    try:
        table = _parsed(block, plan, ragged)
    except pa.ArrowInvalid as error:
        raise ExportRefused(
            plan.path, f"not readable as CSV: {error}", "export it again"
        ) from error
    kept = np.delete(starts, [number - 1 for number, _ in ragged])
    return Sheet(
        plan.path,
        plan.names,
        {name: _column(table.column(name).combine_chunks(), name, plan) for name in plan.asked},
        table.num_rows,
        lambda row: block.line_at(int(kept[row])),
        len(ragged),
        tuple(
            RaggedRow(block.line_at(int(starts[number - 1])), found, len(plan.names))
            for number, found in ragged[:_RAGGED_SHOWN]
        ),
    )


def _starts(block: Block, plan: Plan) -> NDArray[np.int64]:
    """Where the rows begin."""
    starts, totals = np.empty(block.seen.lines + 2, np.int64), np.empty(4, np.int64)
    compile_kernels().find_rows(
        *(block.data, block.at, block.end, True),
        *(plan.delimiter, plan.longest, starts, totals),
    )
    if totals[LONG] >= 0:
        raise too_long(block, int(totals[LONG]), plan.longest, plan.path)
    return starts[: totals[FOUND]]


def _parsed(block: Block, plan: Plan, ragged: list[tuple[int, int]]) -> pa.Table:
    """Asked-for columns as text; rows of another width go to ``ragged`` (number from 1, width)."""

    def set_aside(row: Any) -> Literal["skip"]:
        ragged.append((row.number, row.actual_columns))
        return "skip"

    place = {plan.at[name]: name for name in plan.asked}
    names = [place.get(at, f"#{at}") for at in range(len(plan.names))]
    content: Any = block.data[
        block.at - 1 : block.end
    ]  # with a newline in front: no byte order mark
    stream: Any = pa.BufferReader(pa.py_buffer(content))
    return pacsv.read_csv(
        stream,
        read_options=pacsv.ReadOptions(
            use_threads=False,  # else rows that are set aside come without their number
            block_size=len(content) + 1,
            column_names=names,
        ),
        parse_options=pacsv.ParseOptions(
            delimiter=plan.source.delimiter, newlines_in_values=True, invalid_row_handler=set_aside
        ),
        convert_options=pacsv.ConvertOptions(
            column_types=dict.fromkeys(plan.asked, pa.string()),
            include_columns=list(plan.asked),
            strings_can_be_null=True,
            null_values=[""],
            quoted_strings_can_be_null=True,
        ),
    )


def _column(array: Any, name: str, plan: Plan) -> Column:
    if plan.kind[plan.at[name]] == NUMBER:
        return ParsedColumn(cells.read_numbers(array, plan.source), _Texts(array))
    coded = array.dictionary_encode()
    codes = coded.indices.fill_null(-1).to_numpy(zero_copy_only=False)
    return CodedColumn(CodedTexts(coded.dictionary), codes)


@dataclass(frozen=True, eq=False)
class _Texts:
    """The texts of one column."""

    array: Any

    def arrow(self, rows: NDArray[np.int64] | None) -> Any:
        return self.array if rows is None else self.array.take(pa.array(rows))
