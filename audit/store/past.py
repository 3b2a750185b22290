"""What the store keeps of loops' pasts: steps, curves, edges of the record, days."""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from datetime import date
from typing import Any, TypeVar

from sqlalchemy import RowMapping, Text, and_, case, cast, func, or_, select, union_all
from sqlalchemy.orm import Session

from audit.records import (
    ChangeKind,
    DayRecord,
    KeptDay,
    Outcome,
    PastStep,
    Quantity,
    Reason,
    Record,
    Response,
    Role,
    Step,
    TagState,
    Verdict,
)
from audit.store.bulk import portions
from audit.store.closed import end_of_closed, end_of_fixed
from audit.store.codec import decode
from audit.store.entries import NewestStep, StoredStep
from audit.store.payload import StoredMeasured, change_of, measured_of, reasons_of
from audit.store.tables import (
    CurveRow,
    DayRow,
    EdgeRow,
    LoopRow,
    MeasurementRow,
    SpecVersionRow,
    TagStateRow,
    VerdictRow,
)

T = TypeVar("T")

_SAME_CURVE = and_(
    CurveRow.loop_id == MeasurementRow.loop_id,
    CurveRow.at_us == MeasurementRow.at_us,
    CurveRow.number == MeasurementRow.curve_number,
)
_CURRENT = MeasurementRow.superseded_at.is_(None)


def kept(s: Session, tag: str, from_us: int, to_us: int) -> list[Record]:
    """The current curves and the edges of a loop whose stamps overlap a span, by first stamp.

    None that end in the loop's closed time.
    """
    closed_us = end_of_closed(_loop_id(tag))
    curves = (
        select(CurveRow.from_us, CurveRow.data)
        .join_from(CurveRow, MeasurementRow, _SAME_CURVE)
        .where(
            CurveRow.loop_id == _loop_id(tag),
            CurveRow.to_us >= from_us,
            CurveRow.to_us > closed_us,
            CurveRow.from_us <= to_us,
            func.length(CurveRow.data) > 0,
            _CURRENT,
        )
    )
    slices = select(EdgeRow.from_us, EdgeRow.data).where(
        EdgeRow.loop_id == _loop_id(tag),
        EdgeRow.to_us >= from_us,
        EdgeRow.to_us > closed_us,
        EdgeRow.from_us <= to_us,
    )
    found = [*s.execute(curves), *s.execute(slices)]
    return [decode(data) for _, data in sorted(found, key=lambda row: row[0])]


def edges(s: Session, tag: str) -> list[tuple[int, str]]:
    """The borders (microseconds, side) of a loop at which a slice is kept."""
    query = select(EdgeRow.border_us, EdgeRow.side).where(EdgeRow.loop_id == _loop_id(tag))
    return sorted((row.border_us, row.side) for row in s.execute(query))


def edges_next_to(s: Session, tag: str, from_us: int, to_us: int) -> list[Record]:
    """The kept slices of a loop next to a span, however far.

    Edges: the last before, two after it, because the first setpoint sample of a covered span can
    have one of its own. Steps: the last before and the first after it, because a span may begin or
    end in the middle of what was taken, where the last step knows what the setpoint holds. None in
    the loop's closed time, nor across its end: what they say may have changed in between.
    """
    closed_us = end_of_closed(_loop_id(tag))
    of_loop = select(EdgeRow.data).where(
        EdgeRow.loop_id == _loop_id(tag), EdgeRow.border_us > closed_us, closed_us < to_us
    )
    before = of_loop.where(EdgeRow.side == "to", EdgeRow.border_us < from_us)
    after = of_loop.where(EdgeRow.side == "from", EdgeRow.border_us > to_us)
    steps = (
        select(CurveRow.data)
        .join_from(CurveRow, MeasurementRow, _SAME_CURVE)
        .where(
            MeasurementRow.loop_id == _loop_id(tag),
            MeasurementRow.at_us > closed_us,
            closed_us < to_us,
            _CURRENT,
        )
    )
    at_us = MeasurementRow.at_us
    last = steps.add_columns(at_us).where(at_us < from_us).order_by(at_us.desc()).limit(1)
    known = s.execute(last).all()
    if known:  # an edge before it is older word of what the setpoint holds
        before = before.where(EdgeRow.border_us > known[0].at_us)
    found = [
        *s.scalars(before.order_by(EdgeRow.border_us.desc()).limit(1)),
        *s.scalars(after.order_by(EdgeRow.border_us).limit(2)),
        *(row.data for row in known),
        *s.scalars(steps.where(at_us > to_us).order_by(at_us).limit(1)),
    ]
    return [decode(data) for data in found]


def touched(s: Session, tag: str, from_us: int, to_us: int) -> list[StoredStep]:
    """The current steps of a loop that rest on samples in a span and may change, by time.

    Those in the loop's closed time, or within a change's reach of it, stay as they are.
    """
    resting = (
        select(
            MeasurementRow.at_us,
            MeasurementRow.depends_from_us,
            MeasurementRow.depends_to_us,
            MeasurementRow.window_end_us,
        )
        .where(
            MeasurementRow.loop_id == _loop_id(tag),
            # As a sum no index fits it, so that the one of what a step rests on is used.
            MeasurementRow.at_us + 0 > end_of_fixed(_loop_id(tag)),
            _CURRENT,
        )
        .where(
            or_(MeasurementRow.depends_from_us.is_(None), MeasurementRow.depends_from_us <= to_us)
        )
    )
    # Two ranges of one index; as one condition, or put in order here, all steps would be gone over.
    reaching = resting.where(MeasurementRow.depends_to_us >= from_us)
    still_open = resting.where(MeasurementRow.depends_to_us.is_(None))
    found = [StoredStep(*row) for row in s.execute(union_all(reaching, still_open))]
    return sorted(found, key=lambda step: step.at_us)


def curve(s: Session, tag: str, at_us: int) -> Record | None:
    """The samples a current step was measured from; None where there is no such step, or no more
    samples of it."""
    data = s.execute(
        select(CurveRow.data)
        .join_from(CurveRow, MeasurementRow, _SAME_CURVE)
        .where(MeasurementRow.loop_id == _loop_id(tag), MeasurementRow.at_us == at_us, _CURRENT)
    ).scalar()
    return decode(data) if data else None


def past_steps(s: Session, tag: str, until_us: int | None = None) -> list[PastStep]:
    """A loop's current steps whose window ended before ``until_us`` (None: all), by time."""
    return past_steps_many(s, [tag], until_us)[tag]


def past_steps_many(
    s: Session, tags: Collection[str], until_us: int | None, since_us: int | None = None
) -> dict[str, list[PastStep]]:
    """As ``past_steps`` for many loops, each tag with a list; not before ``since_us``."""
    query = select(
        LoopRow.tag,
        MeasurementRow.at_us,
        MeasurementRow.window_end_us,
        MeasurementRow.sp_from,
        MeasurementRow.sp_to,
        MeasurementRow.kind,
        MeasurementRow.usable,
        MeasurementRow.set_aside,
        cast(MeasurementRow.measured, Text),
        MeasurementRow.spec_band_pct,
    ).join_from(LoopRow, MeasurementRow, LoopRow.id == MeasurementRow.loop_id)
    query = query.where(_CURRENT)
    if until_us is not None:
        query = query.where(MeasurementRow.window_end_us < until_us)
    if since_us is not None:
        query = query.where(MeasurementRow.at_us >= since_us)
    return _by_tag(s, tags, query, _past_step_of)


def _past_step_of(row: Sequence[Any]) -> PastStep:
    _, at_us, window_end_us, sp_from, sp_to, kind, usable, set_aside, measured, band = row
    return PastStep(
        at_us=at_us,
        window_end_us=window_end_us,
        sp_from=sp_from,
        sp_to=sp_to,
        kind=ChangeKind(kind),
        usable=usable,
        set_aside=reasons_of(set_aside),
        measured=StoredMeasured(measured),
        band_pct=band,
    )


def _by_tag(
    s: Session, tags: Collection[str], query: Any, record_of: Callable[[Sequence[Any]], T]
) -> dict[str, list[T]]:
    """Runs a query of (tag, what orders a loop's records, ...) for some tags, many at once."""
    found: dict[str, list[T]] = {tag: [] for tag in tags}
    for some in portions(list(found)):
        rows = s.execute(query.where(LoopRow.tag.in_(some)))
        for row in sorted(rows, key=lambda row: row[1]):
            found[row[0]].append(record_of(row))
    return found


def history(
    s: Session, tag: str, from_us: int | None = None, to_us: int | None = None
) -> list[Step]:
    """A loop's current steps with their verdicts, from_us <= at <= to_us, by time."""
    span = [MeasurementRow.loop_id == _loop_id(tag), _CURRENT]
    if from_us is not None:
        span.append(MeasurementRow.at_us >= from_us)
    if to_us is not None:
        span.append(MeasurementRow.at_us <= to_us)
    verdicts: dict[int, dict[Quantity, Verdict]] = {}
    for row in s.execute(_verdicts_query().where(*span)).mappings():
        verdicts.setdefault(row["at_us"], {})[Quantity(row["quantity"])] = _verdict_of(row)
    rows = s.execute(
        select(*MeasurementRow.__table__.columns).where(*span).order_by(MeasurementRow.at_us)
    ).mappings()
    return [_step_of(row, verdicts.get(row["at_us"], {})) for row in rows]


def _verdicts_query() -> Any:
    return (
        select(*VerdictRow.__table__.columns, SpecVersionRow.valid_from)
        .join_from(
            VerdictRow,
            MeasurementRow,
            and_(
                VerdictRow.loop_id == MeasurementRow.loop_id,
                VerdictRow.at_us == MeasurementRow.at_us,
                VerdictRow.number == MeasurementRow.number,
            ),
        )
        .join(
            SpecVersionRow,
            and_(
                VerdictRow.loop_id == SpecVersionRow.loop_id,
                VerdictRow.spec_version == SpecVersionRow.version,
            ),
        )
    )


def _verdict_of(row: RowMapping) -> Verdict:
    return Verdict(
        limit=row["limit_value"],
        outcome=Outcome(row["outcome"]),
        spec_valid_from=row["valid_from"],
        spec_version=row["spec_version"],
        why=None if row["why"] is None else Reason(row["why"]),
    )


def _step_of(row: RowMapping, verdicts: dict[Quantity, Verdict]) -> Step:
    response = Response(
        measured=measured_of(row["measured"]),
        method_version=row["method_version"],
        spec_band_pct=row["spec_band_pct"],
        y0_eu=row["y0_eu"],
        y_end_eu=row["y_end_eu"],
        noise_eu=row["noise_eu"],
    )
    return Step(
        change=change_of(row),
        response=response,
        verdicts=verdicts,
        usable=row["usable"],
        set_aside=reasons_of(row["set_aside"]),
    )


def newest_steps(s: Session) -> dict[str, NewestStep]:
    """The newest current step of each loop that has one, by tag: an index is asked once a loop."""
    newest = (
        select(func.max(MeasurementRow.at_us))
        .where(MeasurementRow.loop_id == LoopRow.id, _CURRENT)
        .correlate(LoopRow)
        .scalar_subquery()
    )
    # An outer join, so that SQLite begins with the loops, not with all their steps.
    query = select(
        LoopRow.tag, MeasurementRow.at_us, MeasurementRow.usable, MeasurementRow.kind
    ).join_from(
        LoopRow,
        MeasurementRow,
        and_(MeasurementRow.loop_id == LoopRow.id, MeasurementRow.at_us == newest, _CURRENT),
        isouter=True,
    )
    kinds = {kind.value: kind for kind in ChangeKind}
    # Past the session, which would look at each row for mapped objects.
    rows = s.connection().execute(query).all()
    return {
        tag: NewestStep(at_us, usable, kinds[kind])
        for tag, at_us, usable, kind in rows
        if at_us is not None
    }


def step_counts(s: Session) -> dict[str, int]:
    """How many steps are current, how many of them usable, and how often steps were measured."""
    every = s.execute(select(func.count()).select_from(MeasurementRow)).scalar_one()
    usable = func.sum(case((MeasurementRow.usable, 1), else_=0))
    current, of_them = s.execute(select(func.count(), usable).where(_CURRENT)).one()
    return {"current": current, "usable": of_them or 0, "measurements": every}


def day_records(s: Session, tag: str, from_day: date, to_day: date) -> list[DayRecord]:
    """A loop's days from one to another, both inclusive, by day."""
    return day_records_many(s, [tag], from_day, to_day)[tag]


def day_records_many(
    s: Session, tags: Collection[str], from_day: date, to_day: date
) -> dict[str, list[DayRecord]]:
    """As ``day_records`` for many loops, each tag with a list."""
    return _by_tag(s, tags, _days_query(from_day, to_day), _day_of)


def kept_days(s: Session, tag: str, from_day: date, to_day: date) -> list[KeptDay]:
    """As ``day_records``, with the runs each was counted from."""
    query = _days_query(from_day, to_day).add_columns(DayRow.runs).where(LoopRow.tag == tag)
    return [KeptDay(_day_of(row), row.runs) for row in s.execute(query.order_by(DayRow.day))]


def _days_query(from_day: date, to_day: date) -> Any:
    return (
        select(
            LoopRow.tag,
            DayRow.day,
            DayRow.span_us,
            DayRow.auto_us,
            DayRow.mode_us,
            DayRow.saturated_us,
            DayRow.output_us,
            DayRow.pv_bad_us,
        )
        .join_from(LoopRow, DayRow, LoopRow.id == DayRow.loop_id)
        .where(DayRow.day >= from_day, DayRow.day <= to_day)
    )


def _day_of(row: Sequence[Any]) -> DayRecord:
    _, day, span_us, auto_us, mode_us, saturated_us, output_us, pv_bad_us, *_ = row
    return DayRecord(day, span_us, auto_us, mode_us, saturated_us, output_us, pv_bad_us)


def with_past(s: Session) -> frozenset[str]:
    """The tags of the loops of which anything is kept: a step, an edge or a day."""
    kept_of = [
        select(table.loop_id).where(table.loop_id == LoopRow.id).exists()
        for table in (EdgeRow, DayRow, MeasurementRow)
    ]
    return frozenset(s.scalars(select(LoopRow.tag).where(or_(*kept_of))))


def tag_states(s: Session) -> dict[str, dict[Role, TagState]]:
    """What the tags of each loop last said, by the loop's tag and the tag's role."""
    query = select(
        LoopRow.tag,
        TagStateRow.role,
        TagStateRow.newest_us,
        TagStateRow.value,
        TagStateRow.held_since_us,
    ).join_from(TagStateRow, LoopRow, LoopRow.id == TagStateRow.loop_id)
    found: dict[str, dict[Role, TagState]] = {}
    for row in s.execute(query.order_by(LoopRow.id)).mappings():
        state = TagState(row["newest_us"], row["value"], row["held_since_us"])
        found.setdefault(row["tag"], {})[Role(row["role"])] = state
    return found


def _loop_id(tag: str) -> Any:
    return select(LoopRow.id).where(LoopRow.tag == tag).scalar_subquery()
