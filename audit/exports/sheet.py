"""An export file as a table before anything is made of its cells; what every format hands over."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from audit.errors import ExportRefused
from audit.records import ExportSource


@dataclass(frozen=True)
class RaggedRow:
    """A row with too few or too many cells; ``line`` in the file."""

    line: int | None
    found: int
    expected: int


@dataclass(frozen=True, eq=False)
class Sheet:
    """Columns of a file as Arrow arrays [rows], all of one length, by their place in ``names``.

    ``names``: every column of the file, also those that were not asked for. ``ragged`` of its rows
    are not in the columns, ``ragged_rows`` are the first of them. ``line_of`` gives the file's line
    of a row of the columns, or None where the format has no lines.
    """

    path: str
    names: tuple[str, ...]
    columns: Mapping[str, Any]
    rows: int
    line_of: Callable[[int], int | None]
    ragged: int = 0
    ragged_rows: tuple[RaggedRow, ...] = ()


def asked_for(
    names: Sequence[str], source: ExportSource, wanted: Mapping[str, object]
) -> list[str]:
    """The columns to be read: time and, as the layout says, the wanted tags or tag and value."""
    if source.layout == "wide":
        return [name for name in names if name == source.time or name in wanted]
    narrow = [source.time, source.tag, source.value]
    return narrow if source.quality is None else [*narrow, source.quality]


def check_names(names: Sequence[str], source: ExportSource, path: str, line: int | None) -> None:
    """Refuse a file whose columns repeat or are not the declared ones."""
    repeated = sorted({name for name in names if name and names.count(name) > 1})
    if repeated:
        raise ExportRefused(
            path,
            f"column names stand more than once: {', '.join(repeated[:5])}",
            "each column needs its own name",
            line,
        )
    missing = [name for name in asked_for([source.time], source, {}) if name not in names]
    if missing:
        shown = ", ".join(repr(name) for name in names[:8])
        raise ExportRefused(
            path,
            f"no column {', '.join(repr(name) for name in missing)}; it has {shown}",
            "the first row must hold the column names, and [[exports]] in site.toml name the "
            "time column (and of a narrow file tag, value, quality) as they stand there",
            line,
        )
