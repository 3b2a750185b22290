"""What can be pruned, from when on it may go, and how rows are counted and deleted for it."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime
from enum import StrEnum
from typing import Any, NamedTuple

from sqlalchemy import bindparam, delete, func, select
from sqlalchemy.orm import Session

from audit.records import to_us
from audit.store.base import Base

PORTION = 500
"""Rows taken out in one transaction: some hundredths of a second."""


class Kind(StrEnum):
    """What can be pruned, in the order it is gone through.

    ``superseded``: measurements that late data replaced or withdrew, with their verdicts and the
    samples only they rest on. ``steps``: setpoint changes with all that was measured of them.
    ``samples``: of setpoint changes, whose measurements stay. ``edges``: the slices of record at
    the borders of exports. ``revisions``: of a night's list, but the first and the newest.
    ``lists``: of nights, with all revisions. ``exports``: what is known of contents that were
    replaced. ``runs``: lines of the run log.
    """

    SUPERSEDED = "superseded"
    STEPS = "steps"
    SAMPLES = "samples"
    EDGES = "edges"
    REVISIONS = "revisions"
    LISTS = "lists"
    EXPORTS = "exports"
    RUNS = "runs"


class Counts(NamedTuple):
    """Rows of a kind, and the bytes of their long columns, as far as they are known."""

    rows: int = 0
    size_bytes: int = 0

    def plus(self, other: Counts) -> Counts:
        return Counts(self.rows + other.rows, self.size_bytes + other.size_bytes)


def _none(_: str) -> Collection[int]:
    return ()


@dataclass(frozen=True)
class Scope:
    """One kind, and when what may go ends: an instant, and a night.

    ``stays``: of a loop's tag, the instants of the steps that stay however old they are.
    """

    kind: Kind
    before: datetime
    day: date
    stays: Callable[[str], Collection[int]] = _none

    @property
    def before_us(self) -> int:
        return to_us(self.before)


def summed(s: Session, query: Any) -> Counts:
    """Rows and bytes of a query whose last column is the bytes."""
    part = query.subquery()
    rows, size_bytes = s.execute(
        select(func.count(), func.coalesce(func.sum(list(part.c)[-1]), 0)).select_from(part)
    ).one()
    return Counts(rows, int(size_bytes))


def delete_rows(s: Session, table: type[Base], keys: Sequence[Mapping[str, Any]]) -> None:
    """Deletes the rows whose columns have these values, one statement for all."""
    if keys:
        columns = table.__table__.columns
        wanted = [columns[name] == bindparam(f"key_{name}") for name in keys[0]]
        values = [{f"key_{name}": value for name, value in key.items()} for key in keys]
        s.connection().execute(delete(table).where(*wanted), values)
