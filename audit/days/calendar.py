"""Runs -> local days: which days they touch, and the record of each."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from audit.days.coding import encode
from audit.days.runs import LoopRuns, Runs, Span, State, join
from audit.records import (
    DAY_US,
    EPOCH,
    DayRecord,
    KeptDay,
    Loop,
    Reading,
    Role,
    local_day,
    to_us,
)


def split_days(runs: LoopRuns, zone: ZoneInfo) -> dict[date, LoopRuns]:
    """The runs by local day of their stamps; a run that crosses midnight is cut there."""
    parts: dict[date, LoopRuns] = {}
    for day in _days_near(runs):
        start, end = _bounds(day, zone)
        inside = {role: r.within(start, end - 1) for role, r in runs.items()}
        found = {role: r for role, r in inside.items() if len(r)}
        if found:
            parts[day] = found
    return parts


def _days_near(runs: LoopRuns) -> list[date]:
    """The days a run may lie in, whatever the time zone; years between runs are passed over."""
    numbers: set[int] = set()
    for found in runs.values():
        ends = np.stack((found.first_us // DAY_US, found.last_us // DAY_US))
        for first, last in np.unique(ends, axis=1).T.tolist():
            numbers.update(range(first - 1, last + 2))
    return [EPOCH.date() + timedelta(days=number) for number in sorted(numbers)]


def join_days(days: Iterable[LoopRuns]) -> LoopRuns:
    """The runs of several days, in any order, put together: undoes ``split_days``."""
    parts = list(days)
    by_role = {role: [part[role] for part in parts if role in part] for role in Role}
    return {role: join(found) for role, found in by_role.items() if found}


def _bounds(day: date, zone: ZoneInfo) -> Span:
    """First microsecond of a local day and of the next: 23, 24 or 25 hours apart as a rule."""
    start, end = (
        to_us(datetime.combine(each, time(), zone)) for each in (day, day + timedelta(days=1))
    )
    return start, end


def day_records(
    runs: LoopRuns, loop: Loop, reading: Reading, zone: ZoneInfo, days: Collection[date]
) -> list[DayRecord]:
    """The record of each of the days, in order, from runs that reach a silence beyond them.

    Between two stamps the state of the earlier holds if the silence is no longer than
    ``silence_us``, else it is unknown from the earlier on. What is not known of the process
    variable counts as bad. A loop without a mode tag counts as always automatic. A day of which
    nothing is known has zeros.
    """
    known = {
        role: _known(runs[role], reading.silence_us[role]) for role in loop.tags() if role in runs
    }
    return [_day(known, loop, day, *_bounds(day, zone)) for day in sorted(days)]


@dataclass(frozen=True, eq=False)
class _Known:
    """A signal's state over time: it is ``state`` [n] from start_us [n] until end_us [n]."""

    start_us: NDArray[np.int64]
    end_us: NDArray[np.int64]
    state: NDArray[np.int8]

    def spent(self, from_us: int, to_us: int, states: Collection[State]) -> int:
        """Microseconds within from_us..to_us in one of the states."""
        spent = np.minimum(self.end_us, to_us) - np.maximum(self.start_us, from_us)
        return int(np.maximum(spent, 0)[np.isin(self.state, list(states))].sum())

    def reach(self, from_us: int, to_us: int) -> Span | None:
        """From and to of what is known at from_us <= t < to_us, or holds there; None: nothing."""
        inside = np.flatnonzero((self.end_us >= from_us) & (self.start_us < to_us))
        if len(inside) == 0:
            return None
        start, end = self.start_us[inside[0]], self.end_us[inside[-1]]
        return max(int(start), from_us), min(int(end), to_us)


def _known(runs: Runs, silence_us: int) -> _Known:
    following = np.concatenate((runs.first_us[1:], runs.last_us[-1:]))
    holds = following - runs.last_us <= silence_us
    return _Known(runs.first_us, np.where(holds, following, runs.last_us), runs.state)


def _day(
    known: Mapping[Role, _Known], loop: Loop, day: date, start_us: int, end_us: int
) -> DayRecord:
    def spent(role: Role, *states: State) -> int:
        return known[role].spent(start_us, end_us, states) if role in known else 0

    reaches = [reach for k in known.values() if (reach := k.reach(start_us, end_us)) is not None]
    span_us = max(r[1] for r in reaches) - min(r[0] for r in reaches) if reaches else 0
    auto_us = spent(Role.MODE, State.PLAIN)
    mode_us = spent(Role.MODE, State.PLAIN, State.MARKED)
    if loop.mode is None:
        auto_us = mode_us = span_us
    return DayRecord(
        day=day,
        span_us=span_us,
        auto_us=auto_us,
        mode_us=mode_us,
        saturated_us=spent(Role.OUTPUT, State.MARKED),
        output_us=spent(Role.OUTPUT, State.PLAIN, State.MARKED),
        pv_bad_us=span_us - spent(Role.PV, State.PLAIN),
    )


def touched(spans: Iterable[Span], reading: Reading, zone: ZoneInfo) -> list[date]:
    """The local days whose record can depend on samples in the spans (us), in order."""
    longest_us = max(reading.silence_us.values())
    found = set()
    for start_us, end_us in spans:
        first, last = local_day(start_us - longest_us, zone), local_day(end_us + longest_us, zone)
        found |= {first + timedelta(days=number) for number in range((last - first).days + 1)}
    return sorted(found)


def needed(days: Collection[date], reading: Reading, zone: ZoneInfo) -> list[date]:
    """The local days whose runs have to be known to count the days, in order."""
    return touched([_bounds(day, zone) for day in days], reading, zone)


def keep_days(
    runs: LoopRuns,
    loop: Loop,
    reading: Reading,
    zone: ZoneInfo,
    wanted: Collection[date],
    kept: Collection[date] = (),
) -> list[KeptDay]:
    """What is to be kept of the wanted days: those with a stamp, those a state holds through.

    ``kept``: days that were kept before; of these one of which nothing is known any more is given
    too, with zeros, to take the place of the old one.
    """
    parts = split_days(runs, zone)
    near = set(touched([_bounds(day, zone) for day in parts], reading, zone)) | set(kept)
    return [
        KeptDay(record, encode(parts.get(record.day, {})))
        for record in day_records(runs, loop, reading, zone, near & set(wanted))
        if record.span_us > 0 or record.day in parts or record.day in kept
    ]
