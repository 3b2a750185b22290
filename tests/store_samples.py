"""Invented records to put into a store: every field filled, every kind of value somewhere."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta

import numpy as np
from sqlalchemy.orm import Session

from audit.records import (
    SECOND_US,
    CellAccount,
    ChangeKind,
    DayRecord,
    Edge,
    ExportFile,
    ExportRead,
    Group,
    KeptDay,
    LimitStanding,
    ListReason,
    Loop,
    LoopKind,
    LoopResult,
    Measured,
    MeasuredStep,
    Outcome,
    Quantity,
    QuantityTrend,
    RawSamples,
    Reason,
    Record,
    Response,
    Role,
    Samples,
    SetpointChange,
    Spec,
    Standing,
    StandingWord,
    Step,
    Trend,
    Verdict,
    Windows,
    to_us,
)
from audit.store import Store, take_lease, writes

NOW = datetime(2026, 3, 2, 2, 15, 0, 123456, tzinfo=UTC)
LATER = NOW + timedelta(days=1)
VALID_FROM = datetime(2026, 1, 1, tzinfo=UTC)
T0 = to_us(datetime(2026, 3, 1, 8, tzinfo=UTC))
HOUR_US = 3600 * SECOND_US
WINDOWS = Windows(120 * SECOND_US, HOUR_US, 60 * SECOND_US)
FIRST_BLOB = (
    b"OhW;9oMT{Q=3ro8c)`p71}hA%T>t3J#;~r&`^z^yHenGFeqk{Y2BJY&M0S~n6<c0Al+Q@KR)~5=1||@_Wb!pI|IQf}"
    b"kaJ+hq;R1sXJSHeeaF6=VAp$maQ!VQs~{*OA}lH-M7-^FZ|rAT<R0lD+Ud-USd{_*g7F>?"
)
"""``curve(T0, count=8)`` in the first encoding, as the version wrote it that had only that one."""
HASHES = {"settings": "s1", "loops": "l1", "specs": "p1"}


def loop(tag: str = "FIC-101") -> Loop:
    return Loop(
        tag=tag,
        pv=f"{tag}.PV",
        sp=f"{tag}.SP",
        output=f"{tag}.OP",
        mode=f"{tag}.MODE",
        windows=WINDOWS,
        process_unit="U1",
        service="feed to the still — “øvre”",
        kind=LoopKind.FLOW,
        eu="m³/h",
        range_low=-0.1,
        range_high=100.30000000000001,
        auto_modes=("AUTO", "CAS"),
        criticality=4,
        averaging=False,
        notes="colour: blue",
    )


def spec(tag: str = "FIC-101", rise_s: float = 12.1) -> Spec:
    limits = {Quantity.RISE_TIME: rise_s, Quantity.OVERSHOOT: 100 / 3}
    return Spec(tag, VALID_FROM, limits, 5.0, 0.25, "N. Quay", "commissioning")


def samples(start_us: int, count: int, seed: int = 1, bad: bool = False) -> Samples:
    """Values with three decimals every 5 s and a jitter of milliseconds; some bad if asked for."""
    rng = np.random.default_rng(seed)
    jitter = rng.integers(0, 1000, count) * 1000
    t_us = (start_us + np.arange(count) * 5 * SECOND_US + jitter).astype(np.int64)
    value = np.round(50 + np.cumsum(rng.normal(0, 0.1, count)), 3)
    good = np.ones(count, np.bool_)
    if bad:
        good[::7] = False
        value[~good] = np.nan
    return Samples(t_us, value, good)


def curve(at_us: int, seed: int = 1, count: int = 40) -> Record:
    return Record(
        {
            Role.PV: samples(at_us - 60 * SECOND_US, count, seed),
            Role.SP: Samples(
                np.array([at_us - HOUR_US, at_us], np.int64),
                np.array([50.0, 55.0]),
                np.ones(2, np.bool_),
            ),
            Role.OUTPUT: samples(at_us - 60 * SECOND_US, count, seed + 1, bad=True),
            Role.MODE: Samples.empty(),
        }
    )


def measured(value: float = 11.9) -> dict[Quantity, Measured]:
    """Every quantity, in every form a measured value can have."""
    found = {quantity: Measured.missing(Reason.NEEDS_MODEL) for quantity in Quantity}
    return found | {
        Quantity.RISE_TIME: Measured(value, value - 0.1, value + 0.30000000000000004, "direct"),
        Quantity.SETTLING_TIME: Measured.longer_than(600.0, "direct_r1", Reason.CUT_SHORT),
        Quantity.OVERSHOOT: Measured(5e-324, -0.0, 1.7976931348623157e308, "direct"),
        Quantity.DECAY_RATIO: Measured(high=0.1, how="direct"),
        Quantity.PEAK_TIME: Measured.missing(Reason.NO_PEAK),
        Quantity.OUTPUT_REVERSALS: Measured(3, 3, 4, "direct", Reason.NOISY),
    }


def step(at_us: int = T0, value: float = 11.9, spec_version: int = 1) -> Step:
    change = SetpointChange(
        at_us=at_us,
        sp_from=50.0,
        sp_to=55.1,
        kind=ChangeKind.STAIRCASE,
        moves=((at_us, 52.5), (at_us + 5 * SECOND_US, 55.1)),
        window_end_us=at_us + HOUR_US,
        complete=True,
        cut=Reason.CUT_SHORT,
        set_aside=(Reason.DISTURBED,),
        sp_noise_eu=0.001,
    )
    response = Response(measured(value), "1-0f3a", 5.0, 50.02, None, 0.05)
    verdicts = {
        Quantity.RISE_TIME: Verdict(12.1, Outcome.IN_SPEC, VALID_FROM, spec_version),
        Quantity.OVERSHOOT: Verdict(
            100 / 3, Outcome.NOT_MEASURED, VALID_FROM, spec_version, Reason.NO_PEAK
        ),
    }
    return Step(change, response, verdicts, True, (Reason.GAP, Reason.NOISY))


def measured_step(
    at_us: int = T0,
    value: float = 11.9,
    seed: int = 1,
    depends: tuple[int | None, int | None] | None = None,
    spec_version: int = 1,
) -> MeasuredStep:
    from_us, to_us_ = depends or (at_us - HOUR_US, at_us + HOUR_US)
    return MeasuredStep(step(at_us, value, spec_version), curve(at_us, seed), from_us, to_us_)


def day(number: int, auto_s: int = 80_000) -> KeptDay:
    record = DayRecord(
        date(2026, 3, number),
        span_us=86_400 * SECOND_US,
        auto_us=auto_s * SECOND_US,
        mode_us=86_399 * SECOND_US,
        saturated_us=7,
        output_us=86_000 * SECOND_US,
        pv_bad_us=0,
    )
    return KeptDay(record, bytes(range(number)))


def edge(border_us: int, side: str = "to", seed: int = 3) -> Edge:
    start = border_us - 200 * SECOND_US if side == "to" else border_us
    return Edge(border_us, side, Record({Role.PV: samples(start, 30, seed)}))


def result(*steps: MeasuredStep, tag: str = "FIC-101") -> LoopResult:
    return LoopResult(tag, tuple(steps))


def file(path: str = "exports/a.csv", stamp: str = "1", revision: int = 0) -> ExportFile:
    return ExportFile("dcs", path, 1234, stamp, revision)


def read(
    content_hash: str = "h1",
    span: tuple[int, int] | None = (T0, T0 + HOUR_US),
    named: Sequence[str] = ("FIC-101.PV", "FIC-101.SP"),
    good: bool = True,
) -> ExportRead:
    columns = {}
    if span is not None:
        t_us = np.array(span, np.int64)
        flags = np.array([True, good])
        value = np.where(flags, 1.5, np.nan)
        columns = {tag: RawSamples(Samples(t_us, value, flags)) for tag in named}
    account = CellAccount(9, 20, 10, 1, 2, 3, 2, 1, {"text": 1})
    first, last = span or (None, None)
    return ExportRead(content_hash, first, last, tuple(named), columns, account)


def trend() -> Trend:
    return Trend(
        {
            Quantity.RISE_TIME: QuantityTrend(
                quantity=Quantity.RISE_TIME,
                baseline=10.1,
                baseline_low=9.7,
                baseline_high=10.6,
                baseline_steps=30,
                provisional=False,
                recent=14.0,
                recent_low=None,
                recent_high=None,
                beyond_chance=True,
                large_enough=True,
                since_us=T0,
                since_low_us=T0 - HOUR_US,
                since_high_us=None,
                note="compared at 50 to 60 m³/h",
            ),
            Quantity.OVERSHOOT: QuantityTrend(
                Quantity.OVERSHOOT, None, None, None, 3, True, None, None, None, False, False
            ),
        }
    )


def standing(tag: str = "FIC-101", night: date = date(2026, 3, 2)) -> Standing:
    return Standing(
        tag=tag,
        night=night,
        group=Group.OUT_AND_CHANGED,
        standing=StandingWord.OUT_OF_SPEC,
        degraded=True,
        since=date(2026, 2, 20),
        usable_steps=31,
        reasons=(ListReason("rise_time_out", "Rise time 14.0 s, limit 12.1 s."),),
        limits=(
            LimitStanding(
                Quantity.RISE_TIME, 12.1, Outcome.OUT_OF_SPEC, 14.0, 13.1, None, 10, True
            ),
            LimitStanding(Quantity.OVERSHOOT, 100 / 3, Outcome.UNDECIDED, None, None, None, 0),
        ),
        trend=trend(),
        criticality=4,
        distance=0.15702479338842976,
        reference=12.1,
        reference_kind="limit",
        order_quantity=Quantity.RISE_TIME,
        order_value=0.628099173553719,
    )


def unseen(tag: str, night: date = date(2026, 3, 2)) -> Standing:
    return Standing(
        tag=tag,
        night=night,
        group=Group.UNSEEN,
        standing=StandingWord.UNSEEN,
        degraded=False,
        since=None,
        usable_steps=0,
        reasons=(),
        limits=(),
        trend=None,
        criticality=1,
    )


def enter(session: Session, *tags: str) -> None:
    """A site with these loops, each with one spec."""
    writes.enter_site(session, "Quay Test Works")
    loops, specs = [loop(tag) for tag in tags], [spec(tag) for tag in tags]
    writes.enter_register(session, loops, specs, HASHES, NOW)


@contextmanager
def writing(store: Store) -> Iterator[Session]:
    """One write transaction under a lease of its own."""
    with take_lease(store, "a test") as lease, store.write(lease) as session:
        yield session


def same_record(one: Record, other: Record) -> bool:
    """Whether two records hold the same roles, stamps, bits of values, and flags."""
    return one.signals.keys() == other.signals.keys() and all(
        same_samples(one.signals[role], other.signals[role]) for role in one.signals
    )


def same_samples(one: Samples, other: Samples) -> bool:
    return (
        one.t_us.dtype == other.t_us.dtype == np.int64
        and one.value.dtype == other.value.dtype == np.float64
        and one.good.dtype == other.good.dtype == np.bool_
        and np.array_equal(one.t_us, other.t_us)
        and np.array_equal(one.value.view(np.uint64), other.value.view(np.uint64))
        and np.array_equal(one.good, other.good)
    )


def changed(one: Standing) -> Standing:
    return replace(one, usable_steps=one.usable_steps + 1)
