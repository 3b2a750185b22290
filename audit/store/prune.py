"""What may be taken out of the store by age, kind by kind: counted, or deleted a portion at a time.

In: a scope (a kind of content and the instant before which it may go) and one of its ``items``: a
loop, a list, or all of it at once. Out: rows and bytes. ``found`` changes nothing; ``cut`` deletes
at most PORTION rows, or one list, in the transaction it is given. What is safe to ask for is
decided by the caller.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

from sqlalchemy import ColumnElement, Select, Text, cast, exists, func, literal, select, union
from sqlalchemy.orm import Session, aliased

from audit.store import prune_steps as of_steps
from audit.store.prunable import PORTION, Counts, Kind, Scope, delete_rows, summed
from audit.store.size import EXPORT_BYTES, LIST_ROW_BYTES
from audit.store.tables import (
    ExportRow,
    LoopRow,
    NightListRow,
    RunRow,
    StandingRow,
    TagOfSetRow,
    TagSetRow,
)

__all__ = ["Counts", "Kind", "Scope", "cut", "cut_some", "found", "items"]

BRIEFLY_S = 0.1
"""A transaction takes on nothing more after so long."""
RUNS_KEPT = 20
"""The newest lines of the run log, which stay whatever their age."""
RUN_BYTES = 400


def items(s: Session, scope: Scope) -> list[int]:
    """The numbers of what is gone through one by one: loops, lists, or one 0 for all at once."""
    if scope.kind in (Kind.STEPS, Kind.SAMPLES, Kind.EDGES):
        return list(s.scalars(select(LoopRow.id).order_by(LoopRow.id)))
    if scope.kind in (Kind.REVISIONS, Kind.LISTS):
        return list(s.scalars(_lists(scope).order_by(NightListRow.id)))
    return [0]


def found(s: Session, scope: Scope, item: int) -> Counts:
    """What would go."""
    return _WAYS[scope.kind].found(s, scope, item)


def cut(s: Session, scope: Scope, item: int) -> Counts:
    """Takes out at most PORTION rows and says how many and how large; (0, 0) when all is gone."""
    return _WAYS[scope.kind].cut(s, scope, item)


def cut_some(s: Session, scope: Scope, left: list[int]) -> Counts:
    """Works through items from the end of ``left`` until there is enough for one transaction.

    Takes those that are done from the list; what went, out.
    """
    begun = time.monotonic()
    done = Counts()
    while left and done.rows < PORTION and time.monotonic() - begun < BRIEFLY_S:
        counts = cut(s, scope, left[-1])
        if counts.rows < PORTION:
            left.pop()
        done = done.plus(counts)
    return done


def _lists(scope: Scope) -> Select[Any]:
    """The ids of the lists that may go: never those of the newest night."""
    one, other = NightListRow, aliased(NightListRow)
    query = select(one.id).where(one.night < scope.day, one.night < _newest_night())
    if scope.kind is Kind.LISTS:
        return query
    later = exists().where(other.night == one.night, other.revision > one.revision)
    return query.where(one.revision > 1, later)


def _newest_night() -> ColumnElement[Any]:
    return select(func.max(NightListRow.night)).scalar_subquery()


def _found_list(s: Session, _: Scope, list_id: int) -> Counts:
    size = func.length(cast(StandingRow.detail, Text)) + LIST_ROW_BYTES
    query = select(StandingRow.rank, size).where(StandingRow.night_list_id == list_id)
    known = s.execute(select(exists().where(NightListRow.id == list_id))).scalar_one()
    return Counts(int(known), summed(s, query).size_bytes)


def _cut_list(s: Session, scope: Scope, list_id: int) -> Counts:
    counts = _found_list(s, scope, list_id)
    if counts.rows:
        delete_rows(s, StandingRow, [{"night_list_id": list_id}])
        delete_rows(s, NightListRow, [{"id": list_id}])
    return counts


def _exports(scope: Scope) -> Any:
    """Replaced contents that cover nothing any more."""
    return select(ExportRow.id, literal(EXPORT_BYTES)).where(
        ExportRow.superseded_at < scope.before, ExportRow.tag_set_id.is_(None)
    )


def _cut_exports(s: Session, scope: Scope, _: int) -> Counts:
    rows = s.execute(_exports(scope).limit(PORTION)).all()
    delete_rows(s, ExportRow, [{"id": row[0]} for row in rows])
    if rows:
        used = union(
            select(ExportRow.tag_set_id).where(ExportRow.tag_set_id.is_not(None)),
            select(ExportRow.asked_set_id).where(ExportRow.asked_set_id.is_not(None)),
        )
        unused = list(s.scalars(select(TagSetRow.id).where(TagSetRow.id.not_in(used))))
        delete_rows(s, TagOfSetRow, [{"tag_set_id": set_id} for set_id in unused])
        delete_rows(s, TagSetRow, [{"id": set_id} for set_id in unused])
    return Counts(len(rows), EXPORT_BYTES * len(rows))


def _runs(scope: Scope) -> Any:
    newest = select(RunRow.id).order_by(RunRow.id.desc()).limit(RUNS_KEPT)
    return select(RunRow.id, literal(RUN_BYTES)).where(
        RunRow.started_at < scope.before, RunRow.id.not_in(newest)
    )


def _cut_runs(s: Session, scope: Scope, _: int) -> Counts:
    rows = s.execute(_runs(scope).limit(PORTION)).all()
    delete_rows(s, RunRow, [{"id": row[0]} for row in rows])
    return Counts(len(rows), RUN_BYTES * len(rows))


class _Way(NamedTuple):
    """How one kind is counted and how it is taken out."""

    found: Callable[[Session, Scope, int], Counts]
    cut: Callable[[Session, Scope, int], Counts]


def _by(query: Callable[[Scope, int], Any]) -> Callable[[Session, Scope, int], Counts]:
    return lambda s, scope, item: summed(s, query(scope, item))


_WAYS: Mapping[Kind, _Way] = {
    Kind.SUPERSEDED: _Way(of_steps.found_superseded, of_steps.cut_superseded),
    Kind.STEPS: _Way(of_steps.found_steps, of_steps.cut_steps),
    Kind.SAMPLES: _Way(_by(of_steps.samples), of_steps.cut_samples),
    Kind.EDGES: _Way(_by(of_steps.edges), of_steps.cut_edges),
    Kind.REVISIONS: _Way(_found_list, _cut_list),
    Kind.LISTS: _Way(_found_list, _cut_list),
    Kind.EXPORTS: _Way(_by(lambda scope, _: _exports(scope)), _cut_exports),
    Kind.RUNS: _Way(_by(lambda scope, _: _runs(scope)), _cut_runs),
}
