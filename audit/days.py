"""A loop's samples come in, a record of each local day goes out: how long it was in which state.

Between the two stand runs: stretches of consecutive samples in one state without a silence. A day's
runs are kept (encoded) beside its record, so that what later exports bring can be put in without
reading the old ones again. Stamps are integer microseconds throughout, and a run never reaches
across the border of the export span it came in: neighbours are not melted together, because another
export may still bring samples between them. So the counts are the same to the microsecond however
the record was cut into files and in whichever order they came.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from enum import IntEnum
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from audit.records import DayRecord, KeptDay, Loop, Reading, Record, Role, Samples, instant, to_us

Span = tuple[int, int]


class State(IntEnum):
    """What a run's samples have in common."""

    PLAIN = 0
    """A good value: an output not at its limit, a mode that is automatic."""
    MARKED = 1
    """Of the output: at its limit. Of the mode: not automatic."""
    BAD = 2
    """Not good."""


@dataclass(frozen=True, eq=False)
class Runs:
    """One signal's runs in time order, without overlap: first and last stamp [n] in us, state [n].

    Of a run that was cut (at local midnight, or where a correction begins or ends) the border takes
    the place of the stamp: the state held there.
    """

    first_us: NDArray[np.int64]
    last_us: NDArray[np.int64]
    state: NDArray[np.int8]

    def __len__(self) -> int:
        return len(self.first_us)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Runs):
            return NotImplemented
        return (
            np.array_equal(self.first_us, other.first_us)
            and np.array_equal(self.last_us, other.last_us)
            and np.array_equal(self.state, other.state)
        )

    def __hash__(self) -> int:
        return hash((self.first_us.tobytes(), self.last_us.tobytes(), self.state.tobytes()))

    def within(self, from_us: int, to_us: int) -> Runs:
        """The parts of the runs within from_us <= t <= to_us."""
        start = int(np.searchsorted(self.last_us, from_us, "left"))
        stop = int(np.searchsorted(self.first_us, to_us, "right"))
        return Runs(
            np.maximum(self.first_us[start:stop], from_us),
            np.minimum(self.last_us[start:stop], to_us),
            self.state[start:stop],
        )


_NONE = Runs(np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0, np.int8))

LoopRuns = Mapping[Role, Runs]
"""A loop's runs by role; a role without samples is left out."""


def runs_of(
    record: Record,
    loop: Loop,
    reading: Reading,
    spans: Mapping[Role, Sequence[Span]] | None = None,
) -> LoopRuns:
    """The runs of a record.

    ``spans``: from and to (us) of the exports the samples came in, by role; no run crosses a border
    of one. Without them the record counts as one export.
    """
    found = {}
    for role in loop.tags():
        samples = record.of(role)
        if len(samples):
            borders = () if spans is None else spans.get(role, ())
            found[role] = _runs(samples, _states(role, samples, loop), reading, role, borders)
    return found


def _states(role: Role, samples: Samples, loop: Loop) -> NDArray[np.int8]:
    state = np.full(len(samples), State.PLAIN, np.int8)
    if role is Role.MODE:
        state[samples.value < 0.5] = State.MARKED
    elif role is Role.OUTPUT:
        low, high = loop.output_limits
        state[(samples.value <= low) | (samples.value >= high)] = State.MARKED
    state[~samples.good] = State.BAD
    return state


def _runs(
    samples: Samples,
    state: NDArray[np.int8],
    reading: Reading,
    role: Role,
    spans: Sequence[Span],
) -> Runs:
    stamps = samples.t_us
    starts, ends = np.array([*spans], np.int64).reshape(-1, 2).T
    part = np.searchsorted(np.sort(starts), stamps, "right")
    part += np.searchsorted(np.sort(ends), stamps, "left")
    breaks = (np.diff(state) != 0) | (np.diff(part) != 0)
    breaks |= np.diff(stamps) > reading.silence_us[role]
    first = np.concatenate(([0], np.flatnonzero(breaks) + 1))
    last = np.concatenate((first[1:], [len(stamps)])) - 1
    return Runs(stamps[first], stamps[last], state[first])


def merge(kept: LoopRuns, new: LoopRuns, replaced: Mapping[Role, Sequence[Span]]) -> LoopRuns:
    """Kept runs with the replaced spans cut away and the new runs put in.

    ``replaced``: from and to (us), by role, of what ``new`` brings; new runs lie inside them. The
    order in which exports that do not overlap are merged does not matter, nor does merging one
    twice. Where an export overlaps kept runs, these are cut at its ends: their samples next to it
    are not known one by one, and the state is taken to hold up to it and from it on.
    """
    merged = {}
    for role in Role:
        parts = _outside(kept[role], replaced.get(role, ())) if role in kept else []
        if role in new:
            parts.append(new[role])
        joined = _join(parts)
        if len(joined):
            merged[role] = joined
    return merged


def _outside(runs: Runs, spans: Sequence[Span]) -> list[Runs]:
    """The parts of the runs before, between and after the spans."""
    if len(runs) == 0:
        return []
    parts = []
    from_us = int(runs.first_us[0])
    to_us = int(runs.last_us[-1])
    for start, end in [*sorted(spans), (to_us + 1, to_us + 1)]:
        if start > from_us:
            parts.append(runs.within(from_us, start - 1))
        from_us = max(from_us, end + 1)
    return parts


def _join(parts: Iterable[Runs]) -> Runs:
    """All runs in order; two of one state with no instant between them are one."""
    parts = [part for part in parts if len(part)] or [_NONE]
    order = np.argsort(np.concatenate([part.first_us for part in parts]), kind="stable")
    first = np.concatenate([part.first_us for part in parts])[order]
    last = np.concatenate([part.last_us for part in parts])[order]
    state = np.concatenate([part.state for part in parts])[order]
    apart = (first[1:] != last[:-1] + 1) | (state[1:] != state[:-1])
    ends = np.ones(min(len(first), 1), np.bool_)
    starts, stops = np.concatenate((ends, apart)), np.concatenate((apart, ends))
    return Runs(first[starts], last[stops], state[starts])


def local_day(at_us: int, zone: ZoneInfo) -> date:
    """The site's calendar day of an instant."""
    return instant(at_us).astimezone(zone).date()


def split_days(runs: LoopRuns, zone: ZoneInfo) -> dict[date, LoopRuns]:
    """The runs by local day of their stamps; a run that crosses midnight is cut there."""
    if not runs:
        return {}
    first = local_day(min(int(r.first_us[0]) for r in runs.values()), zone)
    last = local_day(max(int(r.last_us[-1]) for r in runs.values()), zone)
    parts: dict[date, LoopRuns] = {}
    for number in range((last - first).days + 1):
        day = first + timedelta(days=number)
        start, end = _bounds(day, zone)
        inside = {role: r.within(start, end - 1) for role, r in runs.items()}
        found = {role: r for role, r in inside.items() if len(r)}
        if found:
            parts[day] = found
    return parts


def join_days(days: Iterable[LoopRuns]) -> LoopRuns:
    """The runs of several days, in any order, put together: undoes ``split_days``."""
    parts = list(days)
    by_role = {role: [part[role] for part in parts if role in part] for role in Role}
    return {role: _join(found) for role, found in by_role.items() if found}


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
    return [
        KeptDay(record, encode(parts.get(record.day, {})))
        for record in day_records(runs, loop, reading, zone, wanted)
        if record.span_us > 0 or record.day in parts or record.day in kept
    ]


_VERSION = 1
_ROLES = (Role.PV, Role.SP, Role.OUTPUT, Role.MODE)


def encode(runs: LoopRuns) -> bytes:
    """The runs as bytes, without loss, the same bytes for the same runs.

    A version byte; for each role in fixed order the count of runs, and for each run the time since
    the end of the last one (the first: since the epoch) and its length x 4 + state; all numbers as
    variable-length integers (LEB128), the first time zigzag-coded.
    """
    out = bytearray([_VERSION])
    for role in _ROLES:
        found = runs.get(role)
        _put(out, 0 if found is None else len(found))
        if found is None:
            continue
        end = 0
        for first, last, state in zip(
            found.first_us.tolist(), found.last_us.tolist(), found.state.tolist(), strict=True
        ):
            since = first - end
            _put(out, 2 * since if since >= 0 else -2 * since - 1)
            _put(out, (last - first) * 4 + state)
            end = last
    return bytes(out)


def decode(data: bytes) -> LoopRuns:
    """What ``encode`` was given. Raises ValueError if the bytes are not what it writes."""
    if not data or data[0] != _VERSION:
        raise ValueError("a day's runs are not in the encoding this version writes")
    numbers = _numbers(data[1:])
    runs = {}
    for role in _ROLES:
        count, numbers = _split(numbers, 1)
        flat, numbers = _split(numbers, 2 * count[0])
        rows = []
        end = 0
        for since, length in zip(flat[::2], flat[1::2], strict=True):
            first = end + (since // 2 if since % 2 == 0 else -(since + 1) // 2)
            end = first + length // 4
            rows.append((first, end, length % 4))
        if rows:
            first_us, last_us, state = np.array(rows, np.int64).T
            runs[role] = Runs(first_us, last_us, state.astype(np.int8))
    if numbers:
        raise ValueError("a day's runs have bytes left over")
    return runs


def _put(out: bytearray, number: int) -> None:
    while number >= 128:
        out.append(number % 128 + 128)
        number //= 128
    out.append(number)


def _numbers(data: bytes) -> list[int]:
    found = []
    number, shift = 0, 0
    for byte in data:
        number += (byte % 128) << shift
        shift += 7
        if byte < 128:
            found.append(number)
            number, shift = 0, 0
    if shift:
        raise ValueError("a day's runs end within a number")
    return found


def _split(numbers: list[int], count: int) -> tuple[list[int], list[int]]:
    if len(numbers) < count:
        raise ValueError("a day's runs are cut off")
    return numbers[:count], numbers[count:]
