"""Until when a loop's past is closed: what late data would need there was pruned, so all stays.

A step is the result of the samples around it. Where some of these were pruned, a step measured from
what is left would be wrong, and so would one found there: the setpoint's last value before late
data is not known any more. So all stays as it is up to the newest instant of which something was
pruned, and as far beyond it as one change can reach. Nothing kept from before that instant is used
any more.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import Any, NamedTuple

from sqlalchemy import bindparam, func, insert, select, update
from sqlalchemy.orm import Session

from audit.store.tables import ClosedRow, LoopRow, LoopVersionRow

NEVER_US = -(2**62)
"""Before any stamp: the end of the closed time of a loop that has none."""


class Closed(NamedTuple):
    """``until_us``: the newest instant of which something was pruned. ``fixed_us``: up to which
    instant steps stay as they are, for a change found there could reach into the closed time."""

    until_us: int
    fixed_us: int


def loop_and_closed(s: Session, tag: str) -> tuple[int | None, Closed | None]:
    """A loop's id, None for one the register never held; and its closed time, if it has any."""
    row = s.connection().execute(_loop_query(), {"tag": tag}).first()
    if row is None:
        return None, None
    if row.until_us is None:
        return row.id, None
    return row.id, Closed(row.until_us, row.until_us + row.reach_us)


@cache
def _loop_query() -> Any:
    """Built once: each night asks it for every loop."""
    loop, closed = LoopRow.__table__, ClosedRow.__table__
    version = LoopVersionRow.__table__
    reach = version.c.before_us + version.c.after_us + 2 * version.c.join_us
    return (
        select(loop.c.id, closed.c.until_us, reach.label("reach_us"))
        .join_from(loop, closed, loop.c.id == closed.c.loop_id, isouter=True)
        .join(
            version,
            (version.c.loop_id == loop.c.id) & version.c.superseded_at.is_(None),
            isouter=True,
        )
        .where(loop.c.tag == bindparam("tag"))
    )


def closed_time(s: Session, tag: str) -> Closed | None:
    """The closed time of a loop; None where nothing of it was pruned."""
    return loop_and_closed(s, tag)[1]


def end_of_closed(loop_id: Any) -> Any:
    """The end of a loop's closed time as part of a statement."""
    until = select(ClosedRow.until_us).where(ClosedRow.loop_id == loop_id).scalar_subquery()
    return func.coalesce(until, NEVER_US)


def end_of_fixed(loop_id: Any) -> Any:
    """Up to which instant a loop's steps stay as they are, as part of a statement."""
    reach = LoopVersionRow.before_us + LoopVersionRow.after_us + 2 * LoopVersionRow.join_us
    until = (
        select(ClosedRow.until_us + reach)
        .join_from(ClosedRow, LoopVersionRow, ClosedRow.loop_id == LoopVersionRow.loop_id)
        .where(ClosedRow.loop_id == loop_id, LoopVersionRow.superseded_at.is_(None))
        .scalar_subquery()
    )
    return func.coalesce(until, NEVER_US)


def close(s: Session, until_us: Mapping[int, int]) -> None:
    """Closes the time of loops, by id, up to an instant; what was closed before stays closed."""
    for loop_id, new_us in until_us.items():
        of_loop = ClosedRow.loop_id == loop_id
        old_us = s.execute(select(ClosedRow.until_us).where(of_loop)).scalar()
        if old_us is None:
            s.execute(insert(ClosedRow).values(loop_id=loop_id, until_us=new_us))
        elif old_us < new_us:
            s.execute(update(ClosedRow).where(of_loop).values(until_us=new_us))
