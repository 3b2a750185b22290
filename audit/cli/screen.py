"""Where the words go: results to standard output, all else to standard error.

Piped output is plain text 80 columns wide (or ``COLUMNS``), without frames, so that it can be
mailed and searched; on a terminal the same text has its colours and the terminal's width.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from time import monotonic
from typing import IO, TYPE_CHECKING, Any, TextIO, cast

from rich.console import Console
from rich.padding import Padding
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

if TYPE_CHECKING:
    from audit.run_report import Progress as Told

STYLE = {
    "out_of_spec": "bold red",
    "in_spec": "green",
    "undecided": "yellow",
    "unseen": "magenta",
    "not_measured": "dim",
    "not_applicable": "dim",
}
"""Colours of standings and outcomes; the words beside them say the same."""

PLAIN_EVERY_S = 10.0
"""Where standard error is no terminal, a line of progress each so many seconds."""


def results() -> Console:
    """Standard output; without the blanks that fill lines where it is no terminal."""
    out = sys.stdout if sys.stdout.isatty() else cast("IO[str]", _Trimmed(sys.stdout))
    return _Results(file=out, markup=False, highlight=False, emoji=False)


class _Results(Console):
    """A console that leaves it to ``main`` what a reader who stops reading means."""

    def on_broken_pipe(self) -> None:
        raise BrokenPipeError


class _Messages(Console):
    """A console whose reader may go: an audit goes on without being watched."""

    def on_broken_pipe(self) -> None:
        self.quiet = True


class _Trimmed:
    """A text stream that drops blanks at the ends of lines. Whole lines have to be written."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self.encoding = stream.encoding

    def write(self, text: str) -> int:
        self._stream.write("\n".join(line.rstrip(" ") for line in text.split("\n")))
        return len(text)

    def flush(self) -> None:
        self._stream.flush()

    def isatty(self) -> bool:
        return False


def messages() -> Console:
    """Standard error."""
    return _Messages(file=sys.stderr, markup=False, highlight=False, emoji=False, soft_wrap=True)


def print_json(found: Mapping[str, Any]) -> None:
    """A result as JSON on standard output."""
    sys.stdout.write(json.dumps(found, ensure_ascii=False, allow_nan=False, indent=1) + "\n")


def table(*columns: str, numbers: tuple[str, ...] = ()) -> Table:
    """An unframed table; the columns in ``numbers`` are set to the right."""
    made = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
    for column in columns:
        made.add_column(column, justify="right" if column in numbers else "left", overflow="fold")
    return made


def indented(text: str | Text, columns: int) -> Padding:
    """A wrapped paragraph, set in by so many columns."""
    return Padding(text, (0, 0, 0, columns))


def hanging(text: str, lead: str, columns: int) -> Table:
    """A wrapped paragraph behind a lead such as a dash, its lines set in alike."""
    made = Table.grid()
    made.add_column(no_wrap=True)
    made.add_column()
    made.add_row(" " * columns + lead, text)
    return made


@contextmanager
def progress() -> Iterator[Told]:
    """What a long work calls with (stage, done, total): a bar, or a few lines where none can be."""
    console = messages()
    if not console.is_terminal:
        yield _Lines(console)
        return
    columns = TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn()
    with Progress(*columns, TimeElapsedColumn(), console=console) as bars:
        yield _Bars(bars)


class _Bars:
    """A bar for each stage."""

    def __init__(self, bars: Progress) -> None:
        self._bars = bars
        self._stages: dict[str, Any] = {}

    def __call__(self, stage: str, done: int, total: int) -> None:
        if stage not in self._stages:
            self._stages[stage] = self._bars.add_task(stage, total=total)
        self._bars.update(self._stages[stage], completed=done, total=total)


class _Lines:
    """A plain line now and then."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._last = monotonic()

    def __call__(self, stage: str, done: int, total: int) -> None:
        now = monotonic()
        if now - self._last >= PLAIN_EVERY_S:
            self._last = now
            self._console.print(f"{stage}: {done} of {total}")
