"""Moves of the setpoint come in, setpoint changes go out: grouped, with windows and reasons.

A change starts at a move that has none in the ``join`` before it; each further move within ``join``
of the last belongs to it. A move in and one out of automatic never belong together. A change that
is still moving ``after`` its start is a moving setpoint (a secondary controller's): one record at
its start, and one for each whole UTC-aligned block of ``after`` through which it keeps moving; the
broken block at its end has none.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.records import (
    ChangeKind,
    Loop,
    Reading,
    Reason,
    Record,
    Role,
    Samples,
    SetpointChange,
    Windows,
)
from audit.setpoints.following import Following
from audit.setpoints.moves import SAME, Indices, Moves, moves_of

RAMP_MOVES = 8
"""So many moves or more can be a ramp ..."""
RAMP_PART = 0.1
"""... if all lie within this part of the change of a straight line."""
SIZE_IN_NOISE = 3.0
"""A change of no more than so many standard deviations of the setpoint's noise is too small."""
HELD_SAMPLES = 32
"""Samples at most of the median that is the level a jittering setpoint holds."""


def find(record: Record, loop: Loop, reading: Reading) -> list[SetpointChange]:
    """The setpoint changes of a loop's record, in time order.

    Kinds, windows and reasons: DEVELOPERS.md, "One setpoint change". ``sp_from``, ``sp_to`` and the
    values of ``moves`` are in the loop's engineering units: the stored values of a setpoint that
    holds numbers, medians of a jittering one.

    Changes of the setpoint that only copy the process variable while the mode tag says that the
    loop is not in automatic are the control system's own bookkeeping: they are no moves.
    """
    sp = record.of(Role.SP).only_good()
    if len(sp) < 2:
        return []
    pv = record.of(Role.PV).only_good()
    mode = record.of(Role.MODE).only_good() if loop.mode is not None else None
    following = Following(sp, pv, mode, loop.windows)
    moves = moves_of(sp, following.changes, loop.windows)
    automatic = following.at_moves(moves.at)
    if mode is not None and not automatic.all():
        own = automatic | ~following.copies(moves.at)
        moves, automatic = Moves(moves.at[own], moves.noise_eu[own]), automatic[own]
    newest_us = max(_newest_us(s) for s in record.signals.values() if s.good.any())
    scene = _Scene(
        sp,
        moves,
        sp.t_us[moves.at],
        following,
        loop.windows,
        reading.silence_us[Role.SP],
        newest_us,
    )
    groups = sorted(scene.groups(automatic), key=lambda group: group.at_us)
    return [scene.change(group) for group in groups]


def _newest_us(samples: Samples) -> int:
    """Stamp of the last good sample; there is one."""
    return int(samples.t_us[len(samples) - 1 - int(samples.good[::-1].argmax())])


@dataclass(frozen=True)
class _Group:
    """Moves first <= k < stop of one change that starts at ``at_us``."""

    at_us: int
    first: int
    stop: int
    moving: bool


@dataclass(frozen=True, eq=False)
class _Scene:
    """What the changes of one record are made from."""

    sp: Samples
    moves: Moves
    stamps: Indices
    following: Following
    windows: Windows
    silence_us: int
    newest_us: int

    def groups(self, automatic: NDArray[np.bool_]) -> Iterator[_Group]:
        """The moves put together, and the blocks of a moving setpoint."""
        apart = np.diff(self.stamps) > self.windows.join_us
        apart |= automatic[1:] != automatic[:-1]
        starts = np.concatenate(([0], np.flatnonzero(apart) + 1, [len(self.stamps)]))
        if len(self.stamps) == 0:
            return
        for first, stop in zip(starts[:-1].tolist(), starts[1:].tolist(), strict=True):
            yield self._from_start(first, stop)
            yield from self._blocks(first, stop)

    def _from_start(self, first: int, stop: int) -> _Group:
        at_us = int(self.stamps[first])
        end = self._stop_at(at_us + self.windows.after_us, first, stop)
        return _Group(at_us, first, end, self._moving(at_us, first, end))

    def _blocks(self, first: int, stop: int) -> Iterator[_Group]:
        """Whole UTC-aligned blocks of ``after`` after the start, moving from end to end."""
        after_us = self.windows.after_us
        block_us = (int(self.stamps[first]) // after_us + 1) * after_us
        while block_us <= self.stamps[stop - 1]:
            start = first + int(np.searchsorted(self.stamps[first:stop], block_us, "left"))
            end = self._stop_at(block_us + after_us - 1, start, stop)
            if self._moving(block_us, start, end):
                yield _Group(block_us, start, end, True)
            block_us += after_us

    def _stop_at(self, to_us: int, first: int, stop: int) -> int:
        return first + int(np.searchsorted(self.stamps[first:stop], to_us, "right"))

    def _moving(self, at_us: int, first: int, stop: int) -> bool:
        """Whether moves first..stop still go on at at_us + after, one ``join`` looked back."""
        still_us = at_us + max(self.windows.after_us - self.windows.join_us, 0)
        return stop > first and int(self.stamps[stop - 1]) > still_us

    def change(self, group: _Group) -> SetpointChange:
        """The change that the moves of a group make."""
        values = [self._held_after(k, group) for k in range(group.first, group.stop)]
        stamps = self.stamps[group.first : group.stop].tolist()
        moves = tuple(zip(stamps, values, strict=True))
        sp_from = self._held_before(group.first)
        noise_eu = float(self.moves.noise_eu[group.first])
        end_us, cut = self._window(group)
        complete = self.newest_us >= end_us
        too_small = _inside_noise(sp_from, values[-1], noise_eu) and not group.moving
        return SetpointChange(
            at_us=group.at_us,
            sp_from=sp_from,
            sp_to=values[-1],
            kind=ChangeKind.MOVING if group.moving else _kind(sp_from, moves),
            moves=moves,
            window_end_us=end_us,
            complete=complete,
            cut=cut,
            set_aside=self._set_aside(group, too_small, complete),
            sp_noise_eu=noise_eu,
        )

    def _set_aside(self, group: _Group, too_small: bool, complete: bool) -> tuple[Reason, ...]:
        first = int(self.moves.at[group.first])
        at = self.moves.at[group.first : group.stop]
        silent = (self.sp.t_us[at] - self.sp.t_us[at - 1]).max() > self.silence_us
        reasons = {
            Reason.NOT_FOLLOWING: not self.following.when(group.at_us, first, group.moving),
            Reason.GAP: bool(silent),
            Reason.TOO_SMALL: too_small,
            Reason.WINDOW_INCOMPLETE: not complete,
        }
        return tuple(reason for reason, holds in reasons.items() if holds)

    def _window(self, group: _Group) -> tuple[int, Reason | None]:
        """Where the window of a change ends, and what cut it."""
        end_us = group.at_us + self.windows.after_us
        cut: Reason | None = None
        if group.stop < len(self.stamps) and self.stamps[group.stop] < end_us:
            end_us, cut = int(self.stamps[group.stop]), Reason.CUT_SHORT
        left_us = self.following.left_automatic(group.at_us, end_us + (cut is not None))
        return (end_us, cut) if left_us is None else (left_us, Reason.NOT_FOLLOWING)

    def _held_before(self, k: int) -> float:
        """The setpoint held just before move k, engineering units."""
        at = int(self.moves.at[k])
        if self.moves.noise_eu[k] == 0.0:
            return float(self.sp.value[at - 1])
        start_us = self.stamps[k] - min(self.windows.join_us, self.windows.before_us)
        start = max(int(np.searchsorted(self.sp.t_us, start_us, "left")), at - HELD_SAMPLES)
        if k > 0:
            start = max(start, int(self.moves.at[k - 1]))
        return float(np.median(self.sp.value[min(start, at - 1) : at]))

    def _held_after(self, k: int, group: _Group) -> float:
        """The setpoint held from move k to the next, engineering units."""
        at = int(self.moves.at[k])
        if self.moves.noise_eu[k] == 0.0:
            return float(self.sp.value[at])
        end_us = group.at_us + self.windows.after_us
        to_us = min(int(self.stamps[k]) + self.windows.join_us, end_us)
        stop = min(int(np.searchsorted(self.sp.t_us, to_us, "right")), at + HELD_SAMPLES)
        if k + 1 < len(self.stamps) and self.stamps[k + 1] <= end_us:
            stop = min(stop, int(self.moves.at[k + 1]))
        return float(np.median(self.sp.value[at:stop]))


def _inside_noise(sp_from: float, sp_to: float, noise_eu: float) -> bool:
    same = SAME * max(abs(sp_from), abs(sp_to))
    return abs(sp_to - sp_from) <= max(SIZE_IN_NOISE * noise_eu, same)


def _kind(sp_from: float, moves: tuple[tuple[int, float], ...]) -> ChangeKind:
    """Step, ramp (moves on the straight line fitted to them by least squares) or staircase."""
    if len(moves) == 1:
        return ChangeKind.STEP
    if len(moves) < RAMP_MOVES:
        return ChangeKind.STAIRCASE
    first_us = moves[0][0]
    t_s = np.array([(stamp - first_us) / 1e6 for stamp, _ in moves])
    value = np.array([held for _, held in moves])
    slope, start = np.polyfit(t_s, value, 1)
    off = np.abs(value - (start + slope * t_s)).max()
    straight = off <= RAMP_PART * abs(moves[-1][1] - sp_from)
    return ChangeKind.RAMP if straight else ChangeKind.STAIRCASE
