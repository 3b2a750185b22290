"""days: runs of states that do not depend on how files were cut, and what a day's record counts."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from itertools import pairwise
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from audit import days
from audit.days import LoopRuns, Runs, State
from audit.records import (
    DAY_US,
    SECOND_US,
    DayRecord,
    KeptDay,
    Loop,
    Reading,
    Record,
    Role,
    Samples,
    Windows,
    to_us,
)

HOUR_US = 3600 * SECOND_US
PARIS = ZoneInfo("Europe/Paris")
UTC_ZONE = ZoneInfo("UTC")
WINDOWS = Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)
LOOP = Loop("L-1", "pv", "sp", WINDOWS, output="op", mode="m", auto_modes=("AUTO",))
READING = Reading()
Span = tuple[int, int]


def samples(t_us: list[int], value: list[float]) -> Samples:
    numbers = np.array(value, np.float64)
    return Samples(np.array(t_us, np.int64), numbers, np.isfinite(numbers))


def every(step_us: int, start: datetime, end: datetime, value: float = 1.0) -> Samples:
    t_us = list(range(to_us(start), to_us(end), step_us))
    return samples(t_us, [value] * len(t_us))


def records(record: Record, day: date, zone: ZoneInfo, loop: Loop = LOOP) -> DayRecord:
    runs = days.runs_of(record, loop, READING)
    (found,) = days.day_records(runs, loop, READING, zone, [day])
    return found


@pytest.mark.parametrize(
    ("day", "hours"),
    [(date(2024, 10, 27), 25), (date(2024, 3, 31), 23), (date(2024, 6, 1), 24)],
)
def test_a_day_is_the_site_s_local_day(day: date, hours: int) -> None:
    """Europe/Paris, 27 October 2024 has 25 hours, 31 March 2024 has 23 (IANA time zones)."""
    noon = datetime(day.year, day.month, day.day, 12, tzinfo=UTC)
    pv = every(60 * SECOND_US, noon - timedelta(days=2), noon + timedelta(days=2))
    mode = every(6 * HOUR_US, noon - timedelta(days=2), noon + timedelta(days=2))
    found = records(Record({Role.PV: pv, Role.MODE: mode}), day, PARIS)
    assert found == DayRecord(
        day=day,
        span_us=hours * HOUR_US,
        auto_us=hours * HOUR_US,
        mode_us=hours * HOUR_US,
        saturated_us=0,
        output_us=0,
        pv_bad_us=0,
    )


def test_a_mode_holds_over_midnight_until_its_next_sample() -> None:
    """Stepped interpolation with bounding values (OPC UA Parts 11 and 13)."""
    day = date(2026, 3, 2)
    midnight = to_us(datetime(2026, 3, 2, tzinfo=UTC))
    mode = samples(
        [midnight - 20 * HOUR_US, midnight + 4 * HOUR_US, midnight + 10 * HOUR_US], [0.0, 1.0, 0.0]
    )
    found = records(Record({Role.MODE: mode}), day, UTC_ZONE)
    assert (found.span_us, found.mode_us, found.auto_us) == (
        10 * HOUR_US,
        10 * HOUR_US,
        6 * HOUR_US,
    )


def test_a_silence_longer_than_allowed_is_unknown_from_the_last_stamp_on() -> None:
    day = date(2026, 3, 2)
    start = to_us(datetime(2026, 3, 2, tzinfo=UTC))
    silence = READING.silence_us[Role.PV]
    pv_us = [start, start + silence, start + 2 * silence + 1, start + 3 * silence]
    record = Record({Role.PV: samples(pv_us, [1.0, 1.0, 1.0, np.nan])})
    found = records(record, day, UTC_ZONE)
    assert found.span_us == 3 * silence
    assert found.pv_bad_us == silence + 1


def test_output_at_its_limit_is_counted_of_the_time_the_output_is_known() -> None:
    day = date(2026, 3, 2)
    start = to_us(datetime(2026, 3, 2, tzinfo=UTC))
    minute = 60 * SECOND_US
    output = samples(
        [start + k * 10 * minute for k in range(6)], [50.0, 100.0, 99.95, np.nan, 0.0, 60.0]
    )
    found = records(Record({Role.OUTPUT: output}), day, UTC_ZONE)
    assert found.output_us == 40 * minute
    assert found.saturated_us == 30 * minute
    assert found.pv_bad_us == found.span_us == 50 * minute


def test_a_loop_without_a_mode_tag_counts_as_always_automatic() -> None:
    day = date(2026, 3, 2)
    pv = every(
        60 * SECOND_US, datetime(2026, 3, 2, 6, tzinfo=UTC), datetime(2026, 3, 2, 9, tzinfo=UTC)
    )
    loop = replace(LOOP, mode=None)
    found = records(Record({Role.PV: pv}), day, UTC_ZONE, loop)
    assert found.auto_us == found.mode_us == found.span_us == 3 * HOUR_US - 60 * SECOND_US
    assert records(Record({Role.PV: pv}), day, UTC_ZONE).mode_us == 0


def test_a_day_without_stamps_has_zeros_and_days_come_in_order() -> None:
    pv = every(
        60 * SECOND_US, datetime(2026, 3, 2, 6, tzinfo=UTC), datetime(2026, 3, 2, 9, tzinfo=UTC)
    )
    runs = days.runs_of(Record({Role.PV: pv}), LOOP, READING)
    asked = [date(2026, 3, 3), date(2026, 3, 2)]
    second, third = days.day_records(runs, LOOP, READING, UTC_ZONE, asked)
    assert (second.day, third.day) == (date(2026, 3, 2), date(2026, 3, 3))
    assert third == DayRecord(date(2026, 3, 3), 0, 0, 0, 0, 0, 0)
    assert days.split_days({}, UTC_ZONE) == {}
    assert days.day_records({}, LOOP, READING, UTC_ZONE, []) == []


# Random records: few stamps far apart, so that silences, midnights and single samples all come.

FIRST = to_us(datetime(2024, 10, 25, tzinfo=UTC))
SILENCE = {
    Role.PV: 2 * HOUR_US,
    Role.OUTPUT: 3 * HOUR_US,
    Role.SP: 20 * HOUR_US,
    Role.MODE: 30 * HOUR_US,
}
COARSE = Reading(silence_us=SILENCE)
ROLES = (Role.PV, Role.SP, Role.OUTPUT, Role.MODE)


def random_record(rng: np.random.Generator) -> Record:
    signals = {}
    for role in ROLES:
        count = int(rng.integers(0, 60))
        ticks = np.unique(rng.integers(0, 4 * 48, count))
        t_us = FIRST + ticks * (HOUR_US // 2) + rng.integers(0, 3, len(ticks))
        choices = [0.0, 1.0] if role is Role.MODE else [0.0, 40.0, 100.0]
        value = rng.choice([*choices, np.nan], len(ticks)).repeat(3)[: len(ticks)]
        signals[role] = samples(t_us.tolist(), value.tolist())
    return Record({role: signal for role, signal in signals.items() if len(signal)})


def pieces(record: Record, rng: np.random.Generator) -> list[tuple[Record, Span]]:
    """The record cut at random instants; with each piece the span of all its stamps."""
    borders = np.sort(rng.integers(FIRST, FIRST + 4 * DAY_US, int(rng.integers(1, 8))))
    found = []
    for start, end in pairwise([FIRST, *borders.tolist(), FIRST + 5 * DAY_US]):
        part = Record({r: s.between(start, end - 1) for r, s in record.signals.items()})
        stamps = np.concatenate([s.t_us for s in part.signals.values()] or [np.empty(0, np.int64)])
        if len(stamps):
            found.append((part, (int(stamps.min()), int(stamps.max()))))
    return found


def maximal(runs: LoopRuns) -> LoopRuns:
    """Neighbouring runs of one state within the silence melted into one."""
    melted: dict[Role, Runs] = {}
    for role, found in runs.items():
        apart = np.diff(found.state) != 0
        apart |= found.first_us[1:] - found.last_us[:-1] > SILENCE[role]
        first = np.concatenate(([True], apart))
        last = np.concatenate((apart, [True]))
        melted[role] = Runs(found.first_us[first], found.last_us[last], found.state[first])
    return melted


def all_days(runs: LoopRuns) -> list[DayRecord]:
    asked = [date(2024, 10, 24) + timedelta(days=k) for k in range(8)]
    return days.day_records(runs, LOOP, COARSE, PARIS, asked)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1))
def test_pieces_merged_in_any_order_are_the_whole(seed: int) -> None:
    rng = np.random.default_rng(seed)
    record = random_record(rng)
    whole = days.runs_of(record, LOOP, COARSE)
    parts = pieces(record, rng)
    kept: LoopRuns = {}
    order = [*rng.permutation(len(parts)).tolist(), *rng.integers(0, len(parts) or 1, 2).tolist()]
    for k in order if parts else []:
        part, span = parts[k]
        spans = {role: [span] for role in ROLES}
        stored = [days.encode(day) for day in days.split_days(kept, PARIS).values()]
        kept = days.join_days([days.decode(day) for day in stored])
        kept = days.merge(kept, days.runs_of(part, LOOP, COARSE, spans), spans)
    assert maximal(kept) == maximal(whole)
    assert all_days(kept) == all_days(whole)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1))
def test_kept_days_do_not_depend_on_the_order_of_the_exports(seed: int) -> None:
    """Only the days around each export are loaded, counted and kept again."""
    rng = np.random.default_rng(seed)
    record = random_record(rng)
    parts = pieces(record, rng)
    whole = (min(a for _, (a, _) in parts), max(b for _, (_, b) in parts)) if parts else (0, 0)

    def stored(exports: list[tuple[Record, Span]]) -> dict[date, DayRecord]:
        store: dict[date, KeptDay] = {}
        for part, span in exports:
            wanted = days.touched([span], COARSE, PARIS)
            near = days.needed(wanted, COARSE, PARIS)
            loaded = [days.decode(store[day].runs) for day in near if day in store]
            spans = {role: [span] for role in ROLES}
            new = days.runs_of(part, LOOP, COARSE, spans)
            merged = days.merge(days.join_days(loaded), new, spans)
            found = days.keep_days(merged, LOOP, COARSE, PARIS, wanted, set(store))
            store |= {kept.record.day: kept for kept in found}
        return {day: kept.record for day, kept in sorted(store.items())}

    shuffled = [parts[k] for k in rng.permutation(len(parts)).tolist()]
    assert stored(shuffled) == stored([(record, whole)])


def test_a_day_whose_samples_are_all_taken_away_is_kept_with_zeros() -> None:
    day = date(2026, 3, 2)
    start = to_us(datetime(2026, 3, 2, 6, tzinfo=UTC))
    span = {Role.PV: [(start, start)]}
    runs = days.runs_of(Record({Role.PV: samples([start], [1.0])}), LOOP, READING)
    (first,) = days.keep_days(runs, LOOP, READING, UTC_ZONE, [day])
    assert days.decode(first.runs) == runs
    gone = days.merge(runs, {}, span)
    assert days.keep_days(gone, LOOP, READING, UTC_ZONE, [day]) == []
    (again,) = days.keep_days(gone, LOOP, READING, UTC_ZONE, [day], [day])
    assert again.record == DayRecord(day, 0, 0, 0, 0, 0, 0)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1))
def test_several_exports_at_once_are_the_same_as_one_after_another(seed: int) -> None:
    """Every second export first, all in one go, then the rest between them in one go."""
    rng = np.random.default_rng(seed)
    record = random_record(rng)
    parts = pieces(record, rng)
    kept: LoopRuns = {}
    for chosen in (parts[::2], parts[1::2]):
        spans = {role: [span for _, span in chosen] for role in ROLES}
        signals = {
            role: samples(
                [t for part, _ in chosen for t in part.of(role).t_us.tolist()],
                [v for part, _ in chosen for v in part.of(role).value.tolist()],
            )
            for role in ROLES
        }
        kept = days.merge(kept, days.runs_of(Record(signals), LOOP, COARSE, spans), spans)
    assert all_days(kept) == all_days(days.runs_of(record, LOOP, COARSE))
    assert maximal(kept) == days.runs_of(record, LOOP, COARSE)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1))
def test_splitting_by_day_and_encoding_lose_nothing(seed: int) -> None:
    rng = np.random.default_rng(seed)
    runs = days.runs_of(random_record(rng), LOOP, COARSE)
    parts = days.split_days(runs, PARIS)
    for day, part in parts.items():
        assert days.decode(days.encode(part)) == part
        assert days.encode(days.decode(days.encode(part))) == days.encode(part)
        for found in part.values():
            stamps = [*found.first_us.tolist(), *found.last_us.tolist()]
            local = {datetime.fromtimestamp(t / 1e6, PARIS).date() for t in stamps if t % DAY_US}
            assert local <= {day}
    shuffled = [parts[day] for day in rng.permutation(sorted(parts)).tolist()]
    assert days.join_days(shuffled) == runs


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1))
def test_a_day_counts_what_a_tally_of_its_seconds_counts(seed: int) -> None:
    """Against a count by hand: each signal's state, held or unknown, from stamp to stamp."""
    record = random_record(np.random.default_rng(seed))
    counted = {found.day: found for found in all_days(days.runs_of(record, LOOP, COARSE))}
    for day, found in counted.items():
        start, end = (
            to_us(datetime(d.year, d.month, d.day, tzinfo=PARIS))
            for d in (day, day + timedelta(days=1))
        )
        tally = {"auto": 0, "mode": 0, "full": 0, "output": 0, "pv": 0}
        seen = [t for s in record.signals.values() for t in s.t_us.tolist() if start <= t < end]
        for role, signal in record.signals.items():
            rows = list(zip(signal.t_us.tolist(), signal.value.tolist(), strict=True))
            for (t, value), (following, _) in pairwise(rows):
                a, b = max(t, start), min(following, end)
                if following - t > SILENCE[role] or a > b or a == end:
                    continue
                seen += [a, b]
                bad = np.isnan(value)
                tally["pv"] += (b - a) * (role is Role.PV and not bad)
                tally["output"] += (b - a) * (role is Role.OUTPUT and not bad)
                tally["full"] += (b - a) * (role is Role.OUTPUT and value in (0.0, 100.0))
                tally["mode"] += (b - a) * (role is Role.MODE and not bad)
                tally["auto"] += (b - a) * (role is Role.MODE and value == 1.0)
        span = max(seen) - min(seen) if seen else 0
        assert found == DayRecord(
            day, span, tally["auto"], tally["mode"], tally["full"], tally["output"],
            span - tally["pv"],
        )  # fmt: skip


def test_a_correction_in_the_middle_of_a_run_cuts_it_at_its_ends() -> None:
    start = to_us(datetime(2026, 3, 2, tzinfo=UTC))
    minute = 60 * SECOND_US
    kept = days.runs_of(
        Record({Role.PV: samples([start + k * minute for k in range(60)], [1.0] * 60)}),
        LOOP,
        READING,
    )
    span = (start + 10 * minute, start + 20 * minute)
    bad = days.runs_of(Record({Role.PV: samples([*span], [np.nan, np.nan])}), LOOP, READING)
    merged = days.merge(kept, bad, {Role.PV: [span]})
    assert merged[Role.PV] == Runs(
        np.array([start, span[0], span[1] + 1]),
        np.array([span[0] - 1, span[1], start + 59 * minute]),
        np.array([State.PLAIN, State.BAD, State.PLAIN], np.int8),
    )
    removed = days.merge(merged, {}, {Role.PV: [(start, start + 90 * minute)]})
    assert removed == {}


def test_overlapping_spans_cut_once() -> None:
    runs = {Role.PV: Runs(np.array([0]), np.array([100]), np.array([0], np.int8))}
    merged = days.merge(runs, {}, {Role.PV: [(20, 60), (30, 40), (50, 70), (-5, 3)]})
    assert merged[Role.PV].first_us.tolist() == [4, 71]
    assert merged[Role.PV].last_us.tolist() == [19, 100]


@pytest.mark.parametrize(
    "cut", [b"", b"\x02", b"\x01\x01", b"\x01\x00\x00\x00\x00\x00", b"\x01\x80"]
)
def test_bytes_that_are_not_runs_are_refused(cut: bytes) -> None:
    with pytest.raises(ValueError, match="a day's runs"):
        days.decode(cut)


@pytest.mark.parametrize(
    ("first", "written"), [(0, "00"), (-1, "01"), (1, "02"), (-2, "03"), (2**31, "8080808010")]
)
@pytest.mark.parametrize(
    ("length", "state", "number"),
    [(0, 2, "02"), (31, 3, "7f"), (32, 0, "8001"), (3214, 1, "b964"), (156121, 1, "e58e26")],
)
def test_numbers_are_written_as_open_formats_write_them(
    first: int, written: str, length: int, state: int, number: str
) -> None:
    """Unsigned LEB128: DWARF 5, 7.6 (2, 127, 128, 12857) and the textbook example 624485; zigzag
    integers: Protocol Buffers, "Signed Integers"."""
    last = first + length
    runs = {Role.SP: Runs(np.array([first]), np.array([last]), np.array([state], np.int8))}
    assert days.encode(runs).hex() == f"01 00 01 {written} {number} 00 00".replace(" ", "")
    assert days.decode(days.encode(runs)) == runs


def test_the_encoding_is_compact() -> None:
    runs = {Role.PV: Runs(
        np.arange(1000) * 60 * SECOND_US, np.arange(1000) * 60 * SECOND_US + 59 * SECOND_US,
        np.zeros(1000, np.int8),
    )}  # fmt: skip
    assert len(days.encode(runs)) < 9 * 1000
    assert days.decode(days.encode({})) == {}
