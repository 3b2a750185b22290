"""The newest word on each loop, without going over its past."""

from __future__ import annotations

from collections.abc import Collection
from typing import Any

from sqlalchemy import and_, func, select
from sqlalchemy.orm import Session, aliased

from audit.records import ChangeKind, Measured, Quantity
from audit.store.bulk import portions
from audit.store.payload import measured_one
from audit.store.tables import LoopRow, MeasurementRow

BEFORE_ALL_US = -(2**62)


def newest_measured(
    s: Session, tags: Collection[str], quantity: Quantity, until_us: int, count: int
) -> dict[str, list[Measured]]:
    """One quantity of each loop's newest plain steps whose window ended before ``until_us``.

    Of the newest ``count`` steps, by time, each tag with a list; a step that was measured before
    the quantity was known is left out.
    """
    found: dict[str, list[Measured]] = {tag: [] for tag in tags}
    query = _query(quantity, until_us, count)
    for some in portions(list(found)):
        for tag, _, stored in sorted(
            s.execute(query.where(LoopRow.tag.in_(some))), key=lambda row: (row[0], row[1])
        ):
            measured = measured_one(stored)
            if measured is not None:
                found[tag].append(measured)
    return found


def _query(quantity: Quantity, until_us: int, count: int) -> Any:
    """Rows of (tag, at_us, the quantity's JSON) from the count-th newest step of each loop on."""
    newest = aliased(MeasurementRow)
    since_us = (
        select(newest.at_us)
        .where(newest.loop_id == LoopRow.id, *_plain(newest, until_us))
        .order_by(newest.at_us.desc())
        .limit(1)
        .offset(count - 1)
        .scalar_subquery()
    )
    bounds = select(LoopRow.id, func.coalesce(since_us, BEFORE_ALL_US).label("since")).subquery()
    of_loop = and_(MeasurementRow.loop_id == bounds.c.id, MeasurementRow.at_us >= bounds.c.since)
    return (
        select(LoopRow.tag, MeasurementRow.at_us, MeasurementRow.measured[quantity.value])
        .join_from(LoopRow, bounds, LoopRow.id == bounds.c.id)
        .join(MeasurementRow, of_loop)
        .where(*_plain(MeasurementRow, until_us))
    )


def _plain(row: Any, until_us: int) -> tuple[Any, ...]:
    return (
        row.superseded_at.is_(None),
        row.kind == ChangeKind.STEP.value,
        row.window_end_us < until_us,
    )
