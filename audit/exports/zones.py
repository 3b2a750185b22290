"""Wall-clock stamps of an IANA zone come in, UTC goes out, with the hours that cannot be told.

Microseconds throughout; a wall stamp is counted as if it were UTC. Offsets come from zoneinfo
(the system's tz database or the tzdata package), looked at every six hours and then narrowed to
the second: a zone does not change its offset twice within six hours.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from audit.records import EPOCH, SECOND_US

_PROBE_S = 6 * 3600
_YEAR_US = 366 * 86_400 * SECOND_US

Whole = NDArray[np.int64]
Flag = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Walls:
    """Wall stamps [n] against a zone's changes. ``change`` is the index of the change a repeated
    stamp belongs to; ``earlier`` is its first UTC reading, ``later`` the second (else equal)."""

    earlier: Whole
    later: Whole
    change: NDArray[np.int64]
    repeated: Flag
    missing: Flag


def placed(wall_us: Whole, zone: ZoneInfo) -> Walls:
    """Each wall stamp's one or two UTC readings; ``missing``: the clock skipped that time."""
    at, offset = _table(wall_us, zone)
    clock_low = at + np.minimum(offset[:-1], offset[1:])
    clock_high = at + np.maximum(offset[:-1], offset[1:])
    piece = np.searchsorted(clock_high, wall_us, "right").astype(np.int64)
    closing = np.append(clock_low, np.iinfo(np.int64).max)
    inside = wall_us >= closing[piece]
    after = np.minimum(piece + inside, len(at))
    back = offset[after] < offset[piece]
    earlier, later = wall_us - offset[piece], wall_us - offset[after]
    return Walls(earlier, later, piece, inside & back, inside & ~back)


def told_apart(walls: Walls, wall_us: Whole, groups: NDArray[np.int64]) -> tuple[Flag, Flag]:
    """Of repeated stamps: which can be told by the order of the rows, and which are the later one.

    ``groups`` [n]: rows of one group stand in the order they were recorded in (a wide file, or one
    tag of a narrow one). Certain is a group whose stamps go back exactly once at a change, inside
    the repeated hour, and never anywhere else.
    """
    order = np.argsort(groups, kind="stable")
    wall, group, change = wall_us[order], groups[order], walls.change[order]
    inside = walls.repeated[order]
    back = (wall[1:] < wall[:-1]) & (group[1:] == group[:-1])
    at_change = back & inside[1:] & inside[:-1] & (change[1:] == change[:-1])
    stray = np.unique(group[1:][back & ~at_change])
    keys, key = np.unique(np.stack([group, change], axis=1), axis=0, return_inverse=True)
    key = key.reshape(-1)
    turns = np.bincount(key[1:][at_change], minlength=len(keys))
    turn_at = np.zeros(len(keys), np.int64)
    turn_at[key[1:][at_change]] = np.flatnonzero(at_change) + 1
    sure = inside & (turns[key] == 1) & ~np.isin(group, stray)
    later = sure & (np.arange(len(wall)) >= turn_at[key])
    certain, second = np.zeros(len(wall), np.bool_), np.zeros(len(wall), np.bool_)
    certain[order], second[order] = sure, later
    return certain, second


def _table(wall_us: Whole, zone: ZoneInfo) -> tuple[Whole, Whole]:
    """UTC instants of the changes around the stamps [k], and the offsets between them [k + 1]."""
    if len(wall_us) == 0:
        return np.empty(0, np.int64), np.zeros(1, np.int64)
    years = [
        (EPOCH + timedelta(microseconds=int(edge))).year
        for edge in (wall_us.min() - _YEAR_US // 300, wall_us.max() + _YEAR_US // 300)
    ]
    found = [change for year in range(years[0], years[1] + 1) for change in _changes(zone, year)]
    start = _offset_s(zone, _year_s(years[0]))
    at = np.array([change[0] for change in found], np.int64) * SECOND_US
    offset = np.array([start, *(change[1] for change in found)], np.int64) * SECOND_US
    return at, offset


@lru_cache(maxsize=1024)
def _changes(zone: ZoneInfo, year: int) -> tuple[tuple[int, int], ...]:
    """Changes of offset in a UTC year: (seconds since the epoch, offset from then on in s)."""
    found = []
    low, end = _year_s(year), _year_s(year + 1)
    before = _offset_s(zone, low)
    while low < end:
        high = min(low + _PROBE_S, end)
        after = _offset_s(zone, high)
        if after != before:
            found.append((_narrowed(zone, low, high, before), after))
        low, before = high, after
    return tuple(found)


def _narrowed(zone: ZoneInfo, low: int, high: int, before: int) -> int:
    while high - low > 1:
        middle = (low + high) // 2
        if _offset_s(zone, middle) == before:
            low = middle
        else:
            high = middle
    return high


def _year_s(year: int) -> int:
    return int((datetime(year, 1, 1, tzinfo=UTC) - EPOCH).total_seconds())


def _offset_s(zone: ZoneInfo, instant_s: int) -> int:
    local = (EPOCH + timedelta(seconds=instant_s)).astimezone(zone)
    offset = local.utcoffset()
    return 0 if offset is None else int(offset.total_seconds())
