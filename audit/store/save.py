"""The rows of one loop's audit -> the store, in one transaction and a handful of statements."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from functools import cache
from typing import Any

from sqlalchemy import bindparam, delete, select, tuple_, update
from sqlalchemy.orm import Session

from audit.errors import UnknownLoop
from audit.records import LoopResult
from audit.store.bulk import add, portions, put
from audit.store.closed import Closed, loop_and_closed
from audit.store.entries import SavedLoop
from audit.store.loop_rows import LoopRows, StepRows, rows_of
from audit.store.tables import (
    CurveRow,
    DayRow,
    EdgeRow,
    MeasurementRow,
    TagStateRow,
    VerdictRow,
)


@dataclass
class _Past:
    """What is stored of one step: numbers used, its curves, and its current measurement."""

    number: int = 0
    curve_number: int = 0
    current: int | None = None
    fingerprint: bytes = b""
    curves: dict[bytes, int] = field(default_factory=dict)

    def holds(self, one: StepRows) -> bool:
        """Whether the current measurement is this one, in whichever encoding."""
        return self.current is not None and (
            self.fingerprint == one.fingerprint or self.fingerprint == one.first_fingerprint()
        )

    def curve_like(self, one: StepRows) -> int | None:
        """The number of the stored curve with this content, in whichever encoding."""
        found = self.curves.get(one.curve["digest"])
        if found is None and self.curves:
            found = self.curves.get(one.first_curve_digest)
        return found


def save_loop(s: Session, result: LoopResult, now: datetime) -> SavedLoop:
    """Writes a loop's result: ``save_rows`` of ``rows_of``."""
    return save_rows(s, rows_of(result), now)


def save_rows(s: Session, rows: LoopRows, now: datetime) -> SavedLoop:
    """Writes a loop's rows. A step that equals the stored one, its curve included, is left alone;
    one that differs gets a new measurement, the old one a ``superseded_at``; a withdrawn one only
    that. In the loop's closed time, and within a change's reach of it, all stays as it is. Verdicts
    rest on a stored version of the loop's spec. Raises UnknownLoop.
    """
    loop_id, closed = loop_and_closed(s, rows.tag)
    if loop_id is None:
        raise UnknownLoop(f"{rows.tag} is no loop of the register")
    open_ = rows if closed is None else _open_part(rows, closed)
    past = _past(s, loop_id, [*(one.at_us for one in open_.steps), *open_.withdrawn])
    withdrawn = [at for at in open_.withdrawn if past[at].current is not None]
    fresh = _fresh(loop_id, open_.steps, past, now)
    changed = [row["at_us"] for row in fresh.measurements if past[row["at_us"]].current is not None]
    _supersede(s, loop_id, [*withdrawn, *changed], now)
    fresh.insert(s)
    _drop_edges(s, loop_id, open_.dropped_edges)
    own = {"loop_id": loop_id}
    put(s, EdgeRow, [own | edge for edge in open_.edges])
    put(s, DayRow, [own | day for day in rows.days])
    put(s, TagStateRow, [own | state for state in rows.tag_states])
    return SavedLoop(
        new=len(fresh.measurements) - len(changed),
        changed=len(changed),
        withdrawn=len(withdrawn),
        closed=len(rows.steps) - len(open_.steps),
    )


def _open_part(rows: LoopRows, closed: Closed) -> LoopRows:
    """The rows without what lies in the loop's closed time."""
    return replace(
        rows,
        steps=tuple(one for one in rows.steps if one.at_us > closed.fixed_us),
        withdrawn=tuple(at_us for at_us in rows.withdrawn if at_us > closed.fixed_us),
        edges=tuple(edge for edge in rows.edges if edge["border_us"] > closed.until_us),
    )


@dataclass
class _Fresh:
    """Rows to be added."""

    curves: list[dict[str, Any]]
    measurements: list[dict[str, Any]]
    verdicts: list[dict[str, Any]]

    def insert(self, s: Session) -> None:
        add(s, CurveRow, self.curves)
        add(s, MeasurementRow, self.measurements)
        add(s, VerdictRow, self.verdicts)


def _fresh(
    loop_id: int, steps: Sequence[StepRows], past: dict[int, _Past], now: datetime
) -> _Fresh:
    fresh = _Fresh([], [], [])
    for one in steps:
        known = past[one.at_us]
        if known.holds(one):
            continue
        key = {"loop_id": loop_id, "at_us": one.at_us, "number": known.number + 1}
        curve_number = known.curve_like(one)
        if curve_number is None:
            curve_number = known.curve_number + 1
            fresh.curves.append({**one.curve, **key, "number": curve_number})
        own = {
            "curve_number": curve_number,
            "fingerprint": one.fingerprint,
            "measured_at": now,
        }
        fresh.measurements.append({**one.measurement, **key, **own})
        fresh.verdicts += [{**verdict, **key} for verdict in one.verdicts]
    return fresh


def _past(s: Session, loop_id: int, stamps: Sequence[int]) -> dict[int, _Past]:
    past: dict[int, _Past] = defaultdict(_Past)
    for some in portions(stamps):
        for row in s.connection().execute(_past_query(), {"loop_id": loop_id, "stamps": some}):
            one = past[row.at_us]
            one.number = max(one.number, row.number)
            one.curve_number = max(one.curve_number, row.curve_number)
            one.curves[row.digest] = row.curve_number
            if row.superseded_at is None:
                one.current, one.fingerprint = row.number, row.fingerprint
    return past


@cache
def _past_query() -> Any:
    measurement, curve = MeasurementRow.__table__.c, CurveRow.__table__.c
    same_curve = (
        (measurement.loop_id == curve.loop_id)
        & (measurement.at_us == curve.at_us)
        & (measurement.curve_number == curve.number)
    )
    return (
        select(
            measurement.at_us,
            measurement.number,
            measurement.superseded_at,
            measurement.fingerprint,
            measurement.curve_number,
            curve.digest,
        )
        .join_from(MeasurementRow.__table__, CurveRow.__table__, same_curve)
        .where(
            measurement.loop_id == bindparam("loop_id"),
            measurement.at_us.in_(bindparam("stamps", expanding=True)),
        )
    )


def _supersede(s: Session, loop_id: int, stamps: Sequence[int], now: datetime) -> None:
    for some in portions(stamps):
        s.execute(
            update(MeasurementRow)
            .where(
                MeasurementRow.loop_id == loop_id,
                MeasurementRow.at_us.in_(some),
                MeasurementRow.superseded_at.is_(None),
            )
            .values(superseded_at=now)
            .execution_options(synchronize_session=False)
        )


def _drop_edges(s: Session, loop_id: int, dropped: Sequence[tuple[int, str]]) -> None:
    for some in portions(dropped):
        s.execute(
            delete(EdgeRow).where(
                EdgeRow.loop_id == loop_id,
                tuple_(EdgeRow.border_us, EdgeRow.side).in_(some),
            )
        )
