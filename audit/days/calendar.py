"""Runs -> local days: which days they touch, and the record of each."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from functools import lru_cache
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
        firsts, lasts = found.first_us // DAY_US, found.last_us // DAY_US
        other = np.append(True, (firsts[1:] != firsts[:-1]) | (lasts[1:] != lasts[:-1]))
        for first, last in zip(firsts[other].tolist(), lasts[other].tolist(), strict=True):
            numbers.update(range(first - 1, last + 2))
    return [EPOCH.date() + timedelta(days=number) for number in sorted(numbers)]


def join_days(days: Iterable[LoopRuns]) -> LoopRuns:
    """The runs of several days, in any order, put together: undoes ``split_days``."""
    parts = list(days)
    by_role = {role: [part[role] for part in parts if role in part] for role in Role}
    return {role: join(found) for role, found in by_role.items() if found}


@lru_cache(maxsize=1024)
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

    def between(self, from_us: int, to_us: int) -> _Known:
        """What is known at from_us <= t < to_us, or holds there."""
        start = int(self.end_us.searchsorted(from_us, "left"))
        stop = max(int(self.start_us.searchsorted(to_us, "left")), start)
        return _Known(
            np.maximum(self.start_us[start:stop], from_us),
            np.minimum(self.end_us[start:stop], to_us),
            self.state[start:stop],
        )

    def spent(self, state: State) -> int:
        """Microseconds in a state."""
        held = self.state == state
        return int((self.end_us[held] - self.start_us[held]).sum())


def _known(runs: Runs, silence_us: int) -> _Known:
    following = np.concatenate((runs.first_us[1:], runs.last_us[-1:]))
    holds = following - runs.last_us <= silence_us
    return _Known(runs.first_us, np.where(holds, following, runs.last_us), runs.state)


def _day(
    known: Mapping[Role, _Known], loop: Loop, day: date, start_us: int, end_us: int
) -> DayRecord:
    inside = {role: one.between(start_us, end_us) for role, one in known.items()}

    def spent(role: Role, state: State) -> int:
        return inside[role].spent(state) if role in inside else 0

    reaches = [(int(k.start_us[0]), int(k.end_us[-1])) for k in inside.values() if len(k.state)]
    span_us = max(r[1] for r in reaches) - min(r[0] for r in reaches) if reaches else 0
    auto_us = spent(Role.MODE, State.PLAIN)
    mode_us = auto_us + spent(Role.MODE, State.MARKED)
    if loop.mode is None:
        auto_us = mode_us = span_us
    saturated_us = spent(Role.OUTPUT, State.MARKED)
    return DayRecord(
        day=day,
        span_us=span_us,
        auto_us=auto_us,
        mode_us=mode_us,
        saturated_us=saturated_us,
        output_us=saturated_us + spent(Role.OUTPUT, State.PLAIN),
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
