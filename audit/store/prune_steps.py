"""Pruning of what is kept of loops' steps: replaced measurements, steps, samples, edges.

In: a scope and the number of a loop. Out: what would go, or what went, of one portion. Where
samples, edges or steps go, the loop's time up to the newest of them is closed.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from typing import Any

from sqlalchemy import (
    ColumnElement,
    Select,
    Text,
    and_,
    bindparam,
    cast,
    exists,
    func,
    select,
    tuple_,
    update,
)
from sqlalchemy.orm import Session, aliased

from audit.store.bulk import portions
from audit.store.closed import close
from audit.store.prunable import PORTION, Counts, Scope, delete_rows, summed
from audit.store.tables import CurveRow, EdgeRow, LoopRow, MeasurementRow, VerdictRow

_CURRENT = MeasurementRow.superseded_at.is_(None)


def _superseded(scope: Scope) -> Select[Any]:
    one = MeasurementRow
    size = func.length(cast(one.measured, Text))
    return select(one.loop_id, one.at_us, one.number, one.curve_number, size).where(
        one.superseded_at.is_not(None), one.superseded_at < scope.before
    )


def found_superseded(s: Session, scope: Scope, _: int) -> Counts:
    """Measurements replaced or withdrawn before an instant, and the curves only they rest on."""
    going = _superseded(scope).subquery()
    other = aliased(MeasurementRow)
    stays = exists().where(
        other.loop_id == CurveRow.loop_id,
        other.at_us == CurveRow.at_us,
        other.curve_number == CurveRow.number,
        other.superseded_at.is_(None) | (other.superseded_at >= scope.before),
    )
    curves = (
        select(CurveRow.loop_id, CurveRow.at_us, CurveRow.number, func.length(CurveRow.data))
        .join_from(
            going,
            CurveRow,
            and_(
                CurveRow.loop_id == going.c.loop_id,
                CurveRow.at_us == going.c.at_us,
                CurveRow.number == going.c.curve_number,
            ),
        )
        .where(~stays)
        .distinct()
    )
    measured = summed(s, _superseded(scope))
    return Counts(measured.rows, measured.size_bytes + summed(s, curves).size_bytes)


def cut_superseded(s: Session, scope: Scope, _: int) -> Counts:
    """Deletes them with their verdicts."""
    rows = s.execute(_superseded(scope).order_by(MeasurementRow.superseded_at).limit(PORTION)).all()
    keys = [{"loop_id": row[0], "at_us": row[1], "number": row[2]} for row in rows]
    delete_rows(s, VerdictRow, keys)
    delete_rows(s, MeasurementRow, keys)
    freed = sum(row[4] for row in rows) + _cut_unused_curves(s, {row[:2] for row in rows})
    return Counts(len(rows), freed)


def _cut_unused_curves(s: Session, steps: Collection[tuple[int, int]]) -> int:
    """Deletes the curves of some steps, by (loop, instant), that no measurement rests on; bytes."""
    curve, one = CurveRow, MeasurementRow
    used = exists().where(
        one.loop_id == curve.loop_id, one.at_us == curve.at_us, one.curve_number == curve.number
    )
    query = select(curve.loop_id, curve.at_us, curve.number, func.length(curve.data)).where(~used)
    freed = 0
    for some in portions(sorted(steps)):
        rows = s.execute(query.where(tuple_(curve.loop_id, curve.at_us).in_(some))).all()
        keys = [{"loop_id": row[0], "at_us": row[1], "number": row[2]} for row in rows]
        delete_rows(s, CurveRow, keys)
        freed += sum(row[3] for row in rows)
    return freed


def _newest_step(loop_id: int) -> ColumnElement[int]:
    newest = select(func.max(MeasurementRow.at_us))
    return newest.where(MeasurementRow.loop_id == loop_id, _CURRENT).scalar_subquery()


def samples(scope: Scope, loop_id: int) -> Select[Any]:
    """The curves of a loop's current steps, but of its newest, whose samples are still there."""
    curve, one = CurveRow, MeasurementRow
    same = and_(
        curve.loop_id == one.loop_id, curve.at_us == one.at_us, curve.number == one.curve_number
    )
    return (
        select(curve.at_us, curve.number, func.length(curve.data))
        .join_from(one, curve, same)
        .where(
            one.loop_id == loop_id,
            _CURRENT,
            one.at_us < scope.before_us,
            one.at_us < _newest_step(loop_id),
            func.length(curve.data) > 0,
        )
    )


def cut_samples(s: Session, scope: Scope, loop_id: int) -> Counts:
    """Empties them; the measurements stay."""
    rows = s.execute(samples(scope, loop_id).order_by(CurveRow.at_us).limit(PORTION)).all()
    if not rows:
        return Counts()
    emptied = update(CurveRow).values(data=b"")
    emptied = emptied.where(
        CurveRow.loop_id == loop_id,
        CurveRow.at_us == bindparam("key_at_us"),
        CurveRow.number == bindparam("key_number"),
    )
    s.connection().execute(emptied, [{"key_at_us": r[0], "key_number": r[1]} for r in rows])
    close(s, {loop_id: rows[-1][0]})
    return Counts(len(rows), sum(row[2] for row in rows))


def edges(scope: Scope, loop_id: int) -> Select[Any]:
    """A loop's edges but the newest, at which its next export goes on."""
    newest = select(func.max(EdgeRow.border_us))
    newest = newest.where(EdgeRow.loop_id == loop_id, EdgeRow.side == "to")
    return select(EdgeRow.border_us, EdgeRow.side, func.length(EdgeRow.data)).where(
        EdgeRow.loop_id == loop_id,
        EdgeRow.border_us < scope.before_us,
        EdgeRow.border_us < newest.scalar_subquery(),
    )


def cut_edges(s: Session, scope: Scope, loop_id: int) -> Counts:
    """Deletes them."""
    rows = s.execute(edges(scope, loop_id).order_by(EdgeRow.border_us).limit(PORTION)).all()
    if not rows:
        return Counts()
    keys = [{"loop_id": loop_id, "border_us": row[0], "side": row[1]} for row in rows]
    delete_rows(s, EdgeRow, keys)
    close(s, {loop_id: rows[-1][0]})
    return Counts(len(rows), sum(row[2] for row in rows))


def _steps(s: Session, scope: Scope, loop_id: int) -> list[int]:
    """The instants of a loop's steps that may go, by time."""
    one = MeasurementRow
    query = select(one.at_us).where(
        one.loop_id == loop_id,
        _CURRENT,
        one.at_us < scope.before_us,
        one.at_us < _newest_step(loop_id),
    )
    old = list(s.scalars(query.order_by(one.at_us)))
    if not old:
        return []
    tag = s.execute(select(LoopRow.tag).where(LoopRow.id == loop_id)).scalar_one()
    stays = scope.stays(tag)
    return [at_us for at_us in old if at_us not in stays]


def _step_bytes(s: Session, loop_id: int, stamps: Sequence[int]) -> int:
    one, curve = MeasurementRow, CurveRow
    size_bytes = 0
    for some in portions(stamps):
        for query in (
            select(one.at_us, func.length(cast(one.measured, Text))).where(
                one.loop_id == loop_id, one.at_us.in_(some)
            ),
            select(curve.at_us, func.length(curve.data)).where(
                curve.loop_id == loop_id, curve.at_us.in_(some)
            ),
        ):
            size_bytes += summed(s, query).size_bytes
    return size_bytes


def found_steps(s: Session, scope: Scope, loop_id: int) -> Counts:
    """A loop's steps, but its newest and those that stay, with all their measurements."""
    stamps = _steps(s, scope, loop_id)
    return Counts(len(stamps), _step_bytes(s, loop_id, stamps))


def cut_steps(s: Session, scope: Scope, loop_id: int) -> Counts:
    """Deletes them."""
    stamps = _steps(s, scope, loop_id)[:PORTION]
    if not stamps:
        return Counts()
    freed = _step_bytes(s, loop_id, stamps)
    keys = [{"loop_id": loop_id, "at_us": at_us} for at_us in stamps]
    for table in (VerdictRow, MeasurementRow, CurveRow):
        delete_rows(s, table, keys)
    close(s, {loop_id: stamps[-1]})
    return Counts(len(stamps), freed)
