"""``[intake]`` of site.toml -> how a run reads, and the size limits of every export file.

In: the table, and the sheet it is of. Out: an ``IntakeRule``; faults are noted in the table.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path

from audit.records import FileLimits, IntakeRule
from audit.sitefiles.settings import Section, Sheet

KEYS = (
    "cores",
    "scratch",
    "largest_file_mb",
    "largest_unpacked_mb",
    "largest_ratio",
    "most_columns",
    "longest_row_kb",
    "longest_text",
    "most_texts",
)
KB, MB = 1000, 1_000_000
"""Bytes of the units that limits are set in."""

_MOST_CORES = 4096


def read_intake(section: Section, sheet: Sheet, folder: Path) -> IntakeRule:
    """The table's settings; ``scratch`` is made absolute from the site's folder."""
    scratch = section.text("scratch", "", blank=True).strip()
    return IntakeRule(
        cores=_cores(section, sheet),
        scratch=os.path.abspath(folder / scratch) if scratch else "",
        limits=_limits(section),
    )


def _cores(section: Section, sheet: Sheet) -> int | None:
    table = sheet.data.get("intake")
    given = table.get("cores", 0) if isinstance(table, Mapping) else 0
    if type(given) is int and given == 0:
        return None
    return section.whole("cores", 1, _MOST_CORES)


def _limits(section: Section) -> FileLimits:
    usual = FileLimits()

    def size(key: str, default: int, unit: int, most: int) -> int:
        return unit * section.whole(key, default // unit, most)

    return FileLimits(
        largest_file_bytes=size("largest_file_mb", usual.largest_file_bytes, MB, 10**9),
        largest_unpacked_bytes=size("largest_unpacked_mb", usual.largest_unpacked_bytes, MB, 10**9),
        largest_ratio=section.whole("largest_ratio", usual.largest_ratio, 10**9),
        most_columns=section.whole("most_columns", usual.most_columns, 10**7),
        longest_row_bytes=size("longest_row_kb", usual.longest_row_bytes, KB, 10**6),
        longest_text=section.whole("longest_text", usual.longest_text, 10**6),
        most_texts=section.whole("most_texts", usual.most_texts, 10**7),
    )
