"""What became of each cell: counted as it is decided, with examples for a person.

Order of the decisions, so that each cell counts once: its row (``ragged_row``, then the stamp),
its tag (``no_tag``, unregistered), its quality (``no_such_quality``, bad), blank, not a number,
and last the samples at one stamp: one is taken, the others are duplicates or replaced.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from audit.errors import Fault
from audit.exports.sheet import Sheet
from audit.records import CellAccount

FAULTS_SHOWN = 20
_EACH_SHOWN = 5
_TEXT_SHOWN = 60

REFUSED = {
    "ragged_row": ("the row has another number of cells than the header", "one cell a column"),
    "bad_time": ("no time stamp between 1970 and 2200", "declare time_format as the file has it"),
    "ambiguous_time": (
        "the hour is repeated by the clock change and the order of the rows does not tell which",
        "export with UTC offsets, or in UTC",
    ),
    "no_such_time": (
        "the clock change skips this local time",
        "export in UTC, or declare the zone the stamps are in",
    ),
    "stray_time": (
        "the time stamp lies more than a year away from the others of the file",
        "see to the clock of its source; if it is right, export those rows in a file of their own",
    ),
    "no_tag": ("no tag name", "each row names its tag"),
    "no_such_quality": (
        "no code of the declared quality scheme",
        "declare quality_scheme as the file has it",
    ),
    "no_mode": (
        "the tag's texts are too many, or too long, to be modes",
        "see that loops.csv names the mode tag; most_texts and longest_text in [intake]",
    ),
    "not_a_number": (
        "no number",
        "plain numbers up to 1e30 with the declared decimal and thousands marks, or the declared "
        "booleans",
    ),
}
"""Reasons a cell is refused for, each with what is wrong and what would be right."""


class Tally:
    """Counts of one file, and at most FAULTS_SHOWN examples of what was refused."""

    def __init__(self) -> None:
        self.rows = 0
        self.read = 0
        self._refused: Counter[str] = Counter()
        self._faults: list[Fault] = []
        self._shown: Counter[str] = Counter()
        self.taken = 0
        self.duplicate = 0
        self.replaced = 0
        self.blank = 0
        self.bad_quality = 0
        self.unregistered = 0

    def piece(self, sheet: Sheet, cells_each: int) -> None:
        """The next piece of the file, with ``cells_each`` value cells in a row.

        Rows with too few or too many cells have all of them refused.
        """
        self.rows += sheet.rows + sheet.ragged
        self.read += (sheet.rows + sheet.ragged) * cells_each
        if sheet.ragged:
            self._refused["ragged_row"] += sheet.ragged * cells_each
        for row in sheet.ragged_rows[: max(0, _EACH_SHOWN - self._shown["ragged_row"])]:
            found = f"{row.found} instead of {row.expected}"
            self._show("ragged_row", sheet.path, row.line, found, None, None)

    def refuse(
        self,
        sheet: Sheet,
        reason: str,
        rows: NDArray[np.int64],
        text_of: Callable[[int], object],
        column: str,
        tag_of: Callable[[int], str | None] = lambda row: None,
        cells_each: int = 1,
    ) -> None:
        """Cells refused in these rows of a piece; the text and tag only of those shown."""
        if len(rows) == 0:
            return
        self._refused[reason] += len(rows) * cells_each
        for row in rows[: max(0, _EACH_SHOWN - self._shown[reason])].tolist():
            line = sheet.line_of(row)
            found = repr(text_of(row))[:_TEXT_SHOWN]
            where = found if line is not None else f"{found} in row {sheet.first_row + row + 1}"
            self._show(reason, sheet.path, line, where, column, tag_of(row))

    def refuse_taken(self, reason: str, cells: int) -> None:
        """Cells that were taken for good first."""
        if cells:
            self._refused[reason] += cells

    def account(self) -> CellAccount:
        """The account of the file."""
        return CellAccount(
            rows=self.rows,
            read=self.read,
            taken=self.taken,
            duplicate=self.duplicate,
            replaced=self.replaced,
            blank=self.blank,
            bad_quality=self.bad_quality,
            unregistered=self.unregistered,
            refused={reason: self._refused[reason] for reason in sorted(self._refused)},
        )

    def faults(self) -> tuple[Fault, ...]:
        """The examples, in the order of their lines."""
        shown: Sequence[Fault] = self._faults[:FAULTS_SHOWN]
        return tuple(sorted(shown, key=lambda fault: fault.line or 0))

    def _show(
        self,
        reason: str,
        path: str,
        line: int | None,
        found: str,
        column: str | None,
        tag: str | None,
    ) -> None:
        problem, remedy = REFUSED[reason]
        self._shown[reason] += 1
        self._faults.append(Fault(path, f"{problem}: {found}", remedy, line, column, tag))
