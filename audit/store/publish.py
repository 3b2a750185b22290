"""Standings -> the night's published list, beside its earlier revisions; and the run log."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from datetime import date, datetime
from typing import Any

from sqlalchemy import insert, select, update
from sqlalchemy.orm import Session

from audit.errors import UnknownLoop
from audit.records import Standing, to_us
from audit.store.bulk import add
from audit.store.engine import compact_json
from audit.store.payload import standing_detail
from audit.store.tables import LoopRow, NightListRow, RunRow, StandingRow


def save_night(
    s: Session, night: date, cutoff: datetime, standings: Sequence[Standing], now: datetime
) -> int:
    """Publishes a night's list, ``standings`` in its order; returns the list's revision.

    The first list of a night is revision 1; a list that equals the newest revision adds nothing;
    one that differs becomes the next. Raises UnknownLoop, and ValueError for another night's
    standing.
    """
    ids = {row.tag: row.id for row in s.execute(select(LoopRow.tag, LoopRow.id))}
    rows = [_standing_values(ids, night, place) for place in enumerate(standings, start=1)]
    digest = hashlib.blake2b(
        compact_json(
            [to_us(cutoff), [row | {"since": str(row["since"])} for row in rows]]
        ).encode(),
        digest_size=16,
    ).digest()
    newest = s.execute(
        select(NightListRow.revision, NightListRow.digest)
        .where(NightListRow.night == night)
        .order_by(NightListRow.revision.desc())
        .limit(1)
    ).first()
    if newest is not None and newest.digest == digest:
        return int(newest.revision)
    revision = 1 if newest is None else newest.revision + 1
    list_id = s.execute(
        insert(NightListRow)
        .values(night=night, revision=revision, cutoff=cutoff, computed_at=now, digest=digest)
        .returning(NightListRow.id)
    ).scalar_one()
    add(s, StandingRow, [row | {"night_list_id": list_id} for row in rows])
    return revision


def _standing_values(
    ids: Mapping[str, int], night: date, place: tuple[int, Standing]
) -> dict[str, Any]:
    rank, standing = place
    if standing.night != night:
        raise ValueError(f"{standing.tag}: a standing of {standing.night} in the list of {night}")
    if standing.tag not in ids:
        raise UnknownLoop(f"{standing.tag} is no loop of the register")
    quantity = standing.order_quantity
    return {
        "rank": rank,
        "loop_id": ids[standing.tag],
        "list_group": standing.group.value,
        "standing": standing.standing.value,
        "degraded": standing.degraded,
        "since": standing.since,
        "usable_steps": standing.usable_steps,
        "criticality": standing.criticality,
        "distance": standing.distance,
        "reference": standing.reference,
        "reference_kind": standing.reference_kind,
        "order_quantity": None if quantity is None else quantity.value,
        "order_value": standing.order_value,
        "detail": standing_detail(standing),
    }


def start_run(s: Session, now: datetime, kind: str) -> int:
    """Opens a line of the run log; returns its id."""
    return s.execute(
        insert(RunRow)
        .values(kind=kind, started_at=now, state="running", counts={})
        .returning(RunRow.id)
    ).scalar_one()


def end_run(
    s: Session,
    run_id: int,
    now: datetime,
    state: str,
    counts: Mapping[str, int],
    error: str | None = None,
) -> None:
    """Closes a line of the run log with how it ended ("finished", "failed") and what it counted."""
    s.execute(
        update(RunRow)
        .where(RunRow.id == run_id)
        .values(ended_at=now, state=state, counts=dict(counts), error=error)
    )
