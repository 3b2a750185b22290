"""What one audit of a loop found -> its rows, in one transaction and a handful of statements."""

from __future__ import annotations

import hashlib
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from functools import cache
from typing import Any

from sqlalchemy import bindparam, delete, select, tuple_, update
from sqlalchemy.orm import Session

from audit.errors import UnknownLoop
from audit.records import LoopResult, MeasuredStep, Record
from audit.store import codec_first
from audit.store.bulk import JsonText, add, portions, put
from audit.store.closed import Closed, loop_and_closed
from audit.store.codec import Packed, encode, pack
from audit.store.engine import compact_json
from audit.store.entries import SavedLoop
from audit.store.payload import step_values
from audit.store.tables import (
    CurveRow,
    DayRow,
    EdgeRow,
    MeasurementRow,
    TagStateRow,
    VerdictRow,
)

_JSON_COLUMNS = ("moves", "change_set_aside", "measured", "set_aside")


@dataclass
class _Past:
    """What is stored of one step: numbers used, its curves, and its current measurement."""

    number: int = 0
    curve_number: int = 0
    current: int | None = None
    fingerprint: bytes = b""
    curves: dict[bytes, int] = field(default_factory=dict)

    def curve_like(self, packed: Packed, curve: Record) -> int | None:
        """The number of the stored curve with this content, in whichever encoding."""
        found = self.curves.get(packed.digest)
        if found is None and self.curves:
            found = self.curves.get(codec_first.digest(curve))
        return found


def save_loop(s: Session, result: LoopResult, now: datetime) -> SavedLoop:
    """Writes a loop's result. A step that equals the stored one, its curve included, is left alone;
    one that differs gets a new measurement, the old one a ``superseded_at``; a withdrawn one only
    that. In the loop's closed time, and within a change's reach of it, all stays as it is. Verdicts
    rest on a stored version of the loop's spec. Raises UnknownLoop.
    """
    loop_id, closed = loop_and_closed(s, result.tag)
    if loop_id is None:
        raise UnknownLoop(f"{result.tag} is no loop of the register")
    open_ = result if closed is None else _open_part(result, closed)
    stamps = [one.step.change.at_us for one in open_.steps]
    past = _past(s, loop_id, [*stamps, *open_.withdrawn])
    withdrawn = [at for at in open_.withdrawn if past[at].current is not None]
    fresh = _fresh(loop_id, open_.steps, past, now)
    changed = [row["at_us"] for row in fresh.measurements if past[row["at_us"]].current is not None]
    _supersede(s, loop_id, [*withdrawn, *changed], now)
    fresh.insert(s)
    _replace_edges(s, loop_id, open_)
    _replace_days(s, loop_id, result)
    _replace_tag_states(s, loop_id, result)
    return SavedLoop(
        new=len(fresh.measurements) - len(changed),
        changed=len(changed),
        withdrawn=len(withdrawn),
        closed=len(result.steps) - len(open_.steps),
    )


def _open_part(result: LoopResult, closed: Closed) -> LoopResult:
    """The result without what lies in the loop's closed time."""
    return replace(
        result,
        steps=tuple(one for one in result.steps if one.step.change.at_us > closed.fixed_us),
        withdrawn=tuple(at_us for at_us in result.withdrawn if at_us > closed.fixed_us),
        edges=tuple(edge for edge in result.edges if edge.border_us > closed.until_us),
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
    loop_id: int, steps: Sequence[MeasuredStep], past: dict[int, _Past], now: datetime
) -> _Fresh:
    fresh = _Fresh([], [], [])
    for one in steps:
        packed = pack(one.curve)
        values = step_values(one.step) | {
            "depends_from_us": one.depends_from_us,
            "depends_to_us": one.depends_to_us,
        }
        verdicts = _verdict_values(one)
        texts = {name: JsonText(compact_json(values[name])) for name in _JSON_COLUMNS}
        fingerprint = _fingerprint(values, texts, verdicts, packed)
        known = past[values["at_us"]]
        if known.current is not None and (
            known.fingerprint == fingerprint
            or known.fingerprint == _first_fingerprint(values, verdicts, one.curve)
        ):
            continue
        key = {"loop_id": loop_id, "at_us": values["at_us"], "number": known.number + 1}
        curve_number = known.curve_like(packed, one.curve)
        if curve_number is None:
            curve_number = known.curve_number + 1
            fresh.curves.append(_curve_values(key | {"number": curve_number}, one.curve, packed))
        own = {"curve_number": curve_number, "fingerprint": fingerprint, "measured_at": now}
        fresh.measurements.append(values | texts | key | own)
        fresh.verdicts += [verdict | key for verdict in verdicts]
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


def _verdict_values(one: MeasuredStep) -> list[dict[str, Any]]:
    return [
        {
            "quantity": quantity.value,
            "spec_version": verdict.spec_version,
            "limit_value": verdict.limit,
            "outcome": verdict.outcome.value,
            "why": None if verdict.why is None else verdict.why.value,
        }
        for quantity, verdict in sorted(one.step.verdicts.items())
    ]


def _fingerprint(
    values: Mapping[str, Any],
    texts: Mapping[str, str],
    verdicts: Sequence[Mapping[str, Any]],
    packed: Packed,
) -> bytes:
    """What a measurement is told from another by: all that is stored of it, and its curve."""
    plain = [value for name, value in values.items() if name not in texts]
    judged = [list(verdict.values()) for verdict in verdicts]
    content = "\n".join((compact_json([plain, judged]), *texts.values()))
    return hashlib.blake2b(content.encode() + packed.digest, digest_size=16).digest()


def _first_fingerprint(
    values: Mapping[str, Any], verdicts: Sequence[Mapping[str, Any]], curve: Record
) -> bytes:
    """The same as it was made when curves were stored in the first encoding."""
    content = compact_json([values, verdicts]).encode() + codec_first.digest(curve)
    return hashlib.blake2b(content, digest_size=16).digest()


def _curve_values(key: dict[str, Any], curve: Record, packed: Packed) -> dict[str, Any]:
    from_us, to_us = _span(curve, key["at_us"])
    return key | {"from_us": from_us, "to_us": to_us, "digest": packed.digest, "data": packed.data}


def _span(record: Record, otherwise_us: int) -> tuple[int, int]:
    """First and last stamp of a record; of one without samples the given instant."""
    filled = [samples.t_us for samples in record.signals.values() if len(samples)]
    first = min((int(stamps[0]) for stamps in filled), default=otherwise_us)
    last = max((int(stamps[-1]) for stamps in filled), default=otherwise_us)
    return first, last


def _replace_edges(s: Session, loop_id: int, result: LoopResult) -> None:
    rows = []
    for edge in result.edges:
        from_us, to_us = _span(edge.record, edge.border_us)
        rows.append(
            {
                "loop_id": loop_id,
                "border_us": edge.border_us,
                "side": edge.side,
                "from_us": from_us,
                "to_us": to_us,
                "data": encode(edge.record),
            }
        )
    for some in portions(result.dropped_edges):
        s.execute(
            delete(EdgeRow).where(
                EdgeRow.loop_id == loop_id,
                tuple_(EdgeRow.border_us, EdgeRow.side).in_(some),
            )
        )
    put(s, EdgeRow, rows)


def _replace_days(s: Session, loop_id: int, result: LoopResult) -> None:
    rows = [
        {
            "loop_id": loop_id,
            "day": kept.record.day,
            "span_us": kept.record.span_us,
            "auto_us": kept.record.auto_us,
            "mode_us": kept.record.mode_us,
            "saturated_us": kept.record.saturated_us,
            "output_us": kept.record.output_us,
            "pv_bad_us": kept.record.pv_bad_us,
            "runs": kept.runs,
        }
        for kept in result.days
    ]
    put(s, DayRow, rows)


def _replace_tag_states(s: Session, loop_id: int, result: LoopResult) -> None:
    rows = [
        {
            "loop_id": loop_id,
            "role": role.value,
            "newest_us": state.newest_us,
            "value": state.value,
            "held_since_us": state.held_since_us,
        }
        for role, state in result.tag_states.items()
    ]
    put(s, TagStateRow, rows)
