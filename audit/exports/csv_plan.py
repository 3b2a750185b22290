"""What is to be made of the columns of one CSV file."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports import csv_kernel as kernel
from audit.exports.sheet import asked_for, check_names
from audit.records import ExportSource


@dataclass(frozen=True, eq=False)
class Plan:
    """``names``: all columns of the file; ``numbers``, ``texts``, ``time``: what is read of them,
    each by its name; ``asked`` all of these in the order of the file."""

    path: str
    source: ExportSource
    names: tuple[str, ...]
    asked: tuple[str, ...]
    numbers: tuple[str, ...]
    texts: tuple[str, ...]

    @property
    def time(self) -> str:
        return self.source.time

    @property
    def delimiter(self) -> int:
        return ord(self.source.delimiter)

    @property
    def decimal(self) -> int:
        return ord(self.source.decimal)

    @property
    def longest(self) -> int:
        """Bytes of a row."""
        return self.source.limits.longest_row_bytes

    @cached_property
    def for_kernel(self) -> bool:
        """Whether the marks are such that the compiled reading takes them."""
        mark, point = self.source.delimiter, self.source.decimal
        return (
            not mark.isalnum() and mark not in '+-"\r\n' and point in (".", ",") and mark != point
        )

    @cached_property
    def at(self) -> Mapping[str, int]:
        """The place of each column in the file; of equal names the first."""
        return {name: at for at, name in reversed([*enumerate(self.names)])}

    @cached_property
    def kind(self) -> NDArray[np.int8]:
        """What the kernel makes of each column of the file."""
        kind = np.full(len(self.names), kernel.SKIPPED, np.int8)
        kind[[self.at[name] for name in self.numbers]] = kernel.NUMBER
        kind[[self.at[name] for name in self.texts]] = kernel.TEXT
        kind[self.at[self.time]] = kernel.TIME
        return kind

    @cached_property
    def place(self) -> NDArray[np.int32]:
        """The place of each column among those of its kind."""
        place = np.zeros(len(self.names), np.int32)
        for group in (self.numbers, self.texts):
            place[[self.at[name] for name in group]] = np.arange(len(group))
        return place


def plan_of(
    header: bytes, source: ExportSource, wanted: Mapping[str, bool], path: str, line: int
) -> Plan:
    """By the header row, which stands on ``line``. Raises ExportRefused."""
    names = _cells(header, source.delimiter, path)
    most = source.limits.most_columns
    if len(names) > most:
        raise ExportRefused(
            path,
            f"{len(names)} columns, more than {most}",
            "export fewer tags a file, or raise most_columns in [intake]",
            line,
        )
    check_names(names, source, path, line)
    asked = tuple(dict.fromkeys(asked_for(names, source, wanted)))
    read = [name for name in asked if name != source.time]
    if source.layout == "wide":
        numbers = tuple(name for name in read if not wanted[name])
    else:
        numbers = tuple(name for name in read if name == source.value)
    known = frozenset(numbers)
    texts = tuple(name for name in read if name not in known)
    return Plan(path, source, names, asked, numbers, texts)


def _cells(row: bytes, delimiter: str, path: str) -> tuple[str, ...]:
    """The cells of the header row, stripped."""
    text = io.StringIO(row.decode("utf-8"), newline="")
    try:
        cells = next(csv.reader(text, delimiter=delimiter))
    except csv.Error as error:
        raise ExportRefused(path, f"header not readable: {error}", "export it again") from error
    return tuple(cell.strip() for cell in cells)
