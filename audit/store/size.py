"""How large the store is, what takes the room, and what of it came lately: told from a sample.

PostgreSQL knows the size of each table with its indexes; SQLite only that of its whole file. There,
what each kind of content takes is told from a sample: the lengths of some rows of some loops, what
a row takes beside them, and how many rows there are.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date
from typing import Any, NamedTuple

from sqlalchemy import LargeBinary, cast, func, select, text
from sqlalchemy.orm import Session

from audit.records import DAY_US, instant
from audit.store.base import Base
from audit.store.tables import (
    CurveRow,
    DayRow,
    EdgeRow,
    ExportRow,
    LoopRow,
    MeasurementRow,
    NightListRow,
    StandingRow,
    TagOfSetRow,
    TagSetRow,
    VerdictRow,
)

RECENT_DAYS = 90
LOOPS_SAMPLED = 25
"""From so many loops, spread over all, the rest is told."""
ROWS_SAMPLED = 20
"""So many of their oldest and of their newest rows are looked at."""


@dataclass(frozen=True)
class Content:
    """One kind of content: rows (told from a sample, but for the measurements), bytes with the
    indexes, and the share of the rows that belongs to the recent days."""

    kind: str
    rows: int
    size_bytes: int
    recent_share: float


@dataclass(frozen=True)
class Size:
    """``used_bytes`` hold content; ``free_bytes`` more are on the disk for rows to come (None: the
    database does not say). ``recent_days``: the days of record up to the newest step that count as
    recent, at most RECENT_DAYS; 0 without a step. ``sampled``: told from a sample.
    """

    used_bytes: int
    free_bytes: int | None
    contents: tuple[Content, ...]
    recent_days: float
    sampled: bool


class _Kind(NamedTuple):
    """A kind of content that every loop has. ``row_bytes``: of a row beside its long column, with
    its index entries, as SQLite's own page statistics gave it on stores of this program."""

    table: type[Base]
    time: Any
    long: Any
    row_bytes: int


_KINDS: Mapping[str, _Kind] = {
    "samples": _Kind(CurveRow, CurveRow.at_us, CurveRow.data, 140),
    "measurements": _Kind(MeasurementRow, MeasurementRow.at_us, MeasurementRow.measured, 440),
    "verdicts": _Kind(VerdictRow, VerdictRow.at_us, None, 90),
    "edges": _Kind(EdgeRow, EdgeRow.border_us, EdgeRow.data, 80),
    "days": _Kind(DayRow, DayRow.day, DayRow.runs, 80),
}
_OF_STEPS = ("samples", "measurements", "verdicts")
LIST_ROW_BYTES = 400
EXPORT_BYTES = 500
_TAG_BYTES = 100
_TABLES: Mapping[str, Sequence[type[Base]]] = {
    **{name: (kind.table,) for name, kind in _KINDS.items()},
    "lists": (NightListRow, StandingRow),
    "exports": (ExportRow, TagSetRow, TagOfSetRow),
}


def size_bytes(s: Session) -> int:
    """Bytes that the store's content takes, with its indexes; told at once, however large."""
    return _on_disk(s)[0]


def size(s: Session, measurements: int, newest_us: int | None) -> Size:
    """The size of the store and of each kind of its content, the largest first.

    ``measurements``: how many rows there are of them; ``newest_us``: instant of the newest step.
    """
    used, free = _on_disk(s)
    ids = list(s.scalars(select(LoopRow.id).order_by(LoopRow.id)))
    sampled = ids[:: max(1, len(ids) // LOOPS_SAMPLED)][:LOOPS_SAMPLED]
    days, since_us = _recent(s, sampled, newest_us)
    found = [
        *_of_loops(s, sampled, len(ids), measurements, since_us),
        _lists(s, instant(since_us).date()),
        _exports(s, since_us),
    ]
    on_sqlite = free is not None
    if not on_sqlite:
        found = [replace(one, size_bytes=_relations(s, _TABLES[one.kind])) for one in found]
    elif (told := sum(one.size_bytes for one in found)) > used:
        found = [replace(one, size_bytes=one.size_bytes * used // told) for one in found]
    rest = used - sum(one.size_bytes for one in found)
    found.sort(key=lambda one: -one.size_bytes)
    return Size(used, free, (*found, Content("other", 0, rest, 0.0)), days, on_sqlite)


def _on_disk(s: Session) -> tuple[int, int | None]:
    """Bytes in use, and bytes that are free inside the file; None where that is not known."""
    if s.get_bind().dialect.name == "sqlite":
        pages, free, page_bytes = (
            s.execute(text(f"PRAGMA {name}")).scalar_one()
            for name in ("page_count", "freelist_count", "page_size")
        )
        return (pages - free) * page_bytes, free * page_bytes
    return _relations(s, list(Base.__subclasses__())), None


def _relations(s: Session, tables: Sequence[type[Base]]) -> int:
    """Bytes of some tables with indexes and long values, as PostgreSQL gives them."""
    sizes = [func.pg_total_relation_size(table.__tablename__) for table in tables]
    return sum(s.execute(select(*sizes)).one())


def _recent(s: Session, loops: Sequence[int], newest_us: int | None) -> tuple[float, int]:
    """How many days before the newest step are looked at, and from which instant on."""
    if newest_us is None:
        return 0.0, 0
    oldest = select(func.min(MeasurementRow.at_us)).where(MeasurementRow.loop_id.in_(loops))
    oldest_us = s.execute(oldest).scalar()
    since_us = max(newest_us - RECENT_DAYS * DAY_US, newest_us if oldest_us is None else oldest_us)
    return max(0, newest_us - since_us) / DAY_US, since_us


def _of_loops(
    s: Session, sampled: Sequence[int], loops: int, measurements: int, since_us: int
) -> list[Content]:
    counts = {name: _counted(s, kind, sampled, since_us) for name, kind in _KINDS.items()}
    by_loops = loops / max(1, len(sampled))
    by_steps = measurements / max(1, counts["measurements"][0])
    contents = []
    for name, kind in _KINDS.items():
        rows, recent = counts[name]
        every = round(rows * (by_steps if name in _OF_STEPS else by_loops))
        bytes_ = every * (kind.row_bytes + _mean_length(s, kind, sampled))
        contents.append(Content(name, every, round(bytes_), recent / max(1, rows)))
    return contents


def _counted(s: Session, kind: _Kind, loops: Sequence[int], since_us: int) -> tuple[int, int]:
    """Rows of some loops, and those of them since an instant."""
    table: Any = kind.table
    since: int | date = instant(since_us).date() if kind.table is DayRow else since_us
    query = select(func.count()).select_from(table).where(table.loop_id.in_(loops))
    rows = s.execute(query).scalar_one()
    return rows, s.execute(query.where(kind.time >= since)).scalar_one()


def _mean_length(s: Session, kind: _Kind, loops: Sequence[int]) -> float:
    """Mean bytes of the long column of some rows; 0 on PostgreSQL, where nobody asks."""
    if kind.long is None or s.get_bind().dialect.name != "sqlite":
        return 0.0
    table: Any = kind.table
    lengths: list[int] = []
    for loop_id in loops:
        query = select(func.length(cast(kind.long, LargeBinary))).where(table.loop_id == loop_id)
        for order in (kind.time, kind.time.desc()):
            lengths += s.scalars(query.order_by(order).limit(ROWS_SAMPLED))
    return sum(lengths) / max(1, len(lengths))


def _lists(s: Session, since: date) -> Content:
    query = select(func.count()).select_from(NightListRow)
    lists = s.execute(query).scalar_one()
    recent = s.execute(query.where(NightListRow.night >= since)).scalar_one()
    newest = s.execute(select(func.max(NightListRow.id))).scalar()
    of_newest = StandingRow.night_list_id == newest
    places = s.execute(select(func.count()).select_from(StandingRow).where(of_newest)).scalar_one()
    long = 0.0
    if s.get_bind().dialect.name == "sqlite":
        length = func.length(cast(StandingRow.detail, LargeBinary))
        some = list(s.scalars(select(length).where(of_newest).limit(LOOPS_SAMPLED * ROWS_SAMPLED)))
        long = sum(some) / max(1, len(some))
    rows = lists * places
    return Content("lists", rows, round(rows * (LIST_ROW_BYTES + long)), recent / max(1, lists))


def _exports(s: Session, since_us: int) -> Content:
    query = select(func.count()).select_from(ExportRow)
    exports = s.execute(query).scalar_one()
    recent = s.execute(query.where(ExportRow.last_us >= since_us)).scalar_one()
    tags = s.execute(select(func.count()).select_from(TagOfSetRow)).scalar_one()
    bytes_ = exports * EXPORT_BYTES + tags * _TAG_BYTES
    return Content("exports", exports, bytes_, recent / max(1, exports))
