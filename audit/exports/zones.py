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
    """Wall stamps [n] against a zone's changes. ``change`` is the UTC instant of the change that a
    repeated stamp belongs to; ``earlier`` is its first UTC reading, ``later`` the second (else
    equal)."""

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
    change = np.append(at, np.iinfo(np.int64).max)[piece]
    return Walls(earlier, later, change, inside & back, inside & ~back)


class Order:
    """The order of a file's wall stamps, followed piece by piece; it tells a repeated hour apart.

    Rows of one group stand in the order they were recorded in (a wide file, or one tag of a narrow
    one). Certain is a group whose stamps go back exactly once at a change, inside the repeated
    hour, and nowhere else in the file: what stands before is the first reading, the rest the
    second.
    """

    def __init__(self) -> None:
        self.repeated = False
        self._turns: dict[tuple[int, int], list[int]] = {}
        self._stray: set[int] = set()
        self._last: dict[int, tuple[int, int, bool]] = {}

    def follow(self, walls: Walls, wall_us: Whole, groups: Whole, rows: Whole) -> None:
        """The next rows of the file: their stamps, groups and numbers in the file [n]."""
        self.repeated = self.repeated or bool(walls.repeated.any())
        seen = [code for code in np.unique(groups).tolist() if code in self._last]
        carried = np.array([self._last[code] for code in seen], np.int64).reshape(-1, 3)
        group = np.concatenate((np.array(seen, np.int64), groups))
        order = np.argsort(group, kind="stable")
        group = group[order]
        wall = np.concatenate((carried[:, 0], wall_us))[order]
        change = np.concatenate((carried[:, 1], walls.change))[order]
        inside = np.concatenate((carried[:, 2] > 0, walls.repeated))[order]
        row = np.concatenate((np.full(len(seen), -1), rows))[order]
        same = group[1:] == group[:-1]
        back = (wall[1:] < wall[:-1]) & same
        at_change = back & inside[1:] & inside[:-1] & (change[1:] == change[:-1])
        self._stray.update(np.unique(group[1:][back & ~at_change]).tolist())
        for at in (np.flatnonzero(at_change) + 1).tolist():
            self._turns.setdefault((int(group[at]), int(change[at])), []).append(int(row[at]))
        for at in np.flatnonzero(np.append(~same, True)[: len(group)]).tolist():
            self._last[int(group[at])] = (int(wall[at]), int(change[at]), bool(inside[at]))

    def told(self, walls: Walls, groups: Whole, rows: Whole) -> tuple[Flag, Flag]:
        """Of repeated stamps [n]: which can be told, and which of these are the second reading."""
        certain, second = np.zeros(len(rows), np.bool_), np.zeros(len(rows), np.bool_)
        at = np.flatnonzero(walls.repeated)
        pairs = np.stack((groups[at], walls.change[at]), axis=1)
        keys, key = np.unique(pairs, axis=0, return_inverse=True)
        key = key.reshape(-1)
        for number, (group, change) in enumerate(keys.tolist()):
            turns = self._turns.get((group, change), [])
            if len(turns) == 1 and group not in self._stray:
                own = at[key == number]
                certain[own] = True
                second[own] = rows[own] >= turns[0]
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
