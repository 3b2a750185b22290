"""Does the controller follow its setpoint? By the mode tag or, without one, by the setpoint itself.

In manual many control systems make the setpoint follow the process variable, so that the change
back to automatic is bumpless. Such a setpoint copies the process variable: each of its changes goes
to where the process variable already is. A setpoint that is followed does the opposite: it goes
away from the process variable, which comes after it.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from audit.records import Samples, Windows
from audit.setpoints.moves import Flags, Floats, Indices, changes, portions

NEAR = 0.75
"""A change that ends within this part of its own size of the process variable may be a copy."""
MANY = 3
NEARER = 0.6
"""So many changes that together have at most this part of the distance left that there was: the
setpoint tracks. Changes of a followed setpoint go away from the process variable."""
BEHIND = 3
"""Samples of the process variable that a copy may be made from: the newest and those before."""
JUMP = 0.1
"""A jump that ends within this part of its size of where the process variable was is a copy."""


@dataclass(frozen=True, eq=False)
class Following:
    """The good samples that tell whether the setpoint is followed; ``mode`` None: no mode tag."""

    sp: Samples
    pv: Samples
    mode: Samples | None
    windows: Windows

    def at_moves(self, moves: Indices) -> Flags:
        """Which of the moves [k] are in an automatic mode by the mode held at them."""
        if self.mode is None:
            return np.ones(len(moves), np.bool_)
        held = np.searchsorted(self.mode.t_us, self.sp.t_us[moves], "right") - 1
        automatic = np.zeros(len(moves), np.bool_)
        automatic[held >= 0] = self.mode.value[held[held >= 0]] > 0.5
        return automatic

    def copies(self, moves: Indices) -> Flags:
        """Which of the moves [k] only copy the process variable."""
        return np.isin(moves, self.changes[self._copied])

    def when(self, at_us: int, first: int, moving: bool) -> bool:
        """Whether the setpoint is followed at ``at_us``, from where its sample ``first`` moved.

        With a mode tag: in automatic then and over the ``join`` before (a jump to the process
        variable on the way into automatic is no change a person made); an unknown mode is none.
        """
        if self.mode is None:
            return not (self._tracks(at_us, first) or (not moving and self._jumps(first)))
        start_us = at_us - self.windows.join_us
        start = max(int(np.searchsorted(self.mode.t_us, start_us, "right")) - 1, 0)
        stop = int(np.searchsorted(self.mode.t_us, at_us, "right"))
        held = self.mode.value[start:stop]
        return len(held) > 0 and bool((held > 0.5).all())

    def left_automatic(self, after_us: int, to_us: int) -> int | None:
        """Stamp of the first sample with after < t < to that is not in an automatic mode."""
        if self.mode is None:
            return None
        start = int(np.searchsorted(self.mode.t_us, after_us, "right"))
        stop = int(np.searchsorted(self.mode.t_us, to_us, "left"))
        left = np.flatnonzero(self.mode.value[start:stop] <= 0.5)
        return int(self.mode.t_us[start + left[0]]) if len(left) else None

    def _tracks(self, at_us: int, first: int) -> bool:
        """Whether the setpoint copies the process variable from before to after ``at_us``."""
        own = int(np.searchsorted(self.changes, first))
        start = int(np.searchsorted(self._stamps, at_us - self.windows.before_us, "left"))
        stop = int(np.searchsorted(self._stamps, at_us + self.windows.after_us, "right"))
        if stop - start < MANY or not self._copied[own]:
            return False
        left, reached = self._distances
        return bool(reached[start:stop].sum() <= NEARER * left[start:stop].sum())

    def _jumps(self, first: int) -> bool:
        """Whether sample ``first`` went to where the process variable was just before it."""
        earlier = int(np.searchsorted(self.pv.t_us, self.sp.t_us[first], "left")) - 1
        if earlier < 0:
            return False
        size = abs(self.sp.value[first] - self.sp.value[first - 1])
        return bool(abs(self.sp.value[first] - self.pv.value[earlier]) <= JUMP * size)

    @cached_property
    def changes(self) -> Indices:
        """Indices of the setpoint samples whose value differs from the one before."""
        return changes(self.sp.value)

    @cached_property
    def _stamps(self) -> Indices:
        """Stamps of the changes, microseconds."""
        return self.sp.t_us[self.changes]

    @cached_property
    def _copied(self) -> Flags:
        """Which of the changes only copy the process variable: they end where it was."""
        left, reached = self._distances
        copied = np.empty(len(left), np.bool_)
        first = 0
        for at in portions(self.changes):
            some = slice(first, first + len(at))
            size = np.abs(self.sp.value[at] - self.sp.value[at - 1])
            copied[some] = (reached[some] <= NEAR * size) & (reached[some] < left[some])
            first += len(at)
        return copied

    @cached_property
    def _distances(self) -> tuple[Floats, Floats]:
        """Distance from the process variable that each change left, and that it reached, in eu."""
        some = [self._distances_of(at) for at in portions(self.changes)]
        none = np.empty(0)
        return (
            np.concatenate([none, *(left for left, _ in some)]),
            np.concatenate([none, *(reached for _, reached in some)]),
        )

    def _distances_of(self, at: Indices) -> tuple[Floats, Floats]:
        """The same of the changes ``at`` [k].

        Of the process variable the last sample up to the change counts, or one of the two before it
        if they are recent and nearer: the setpoint may be a scan or two behind. Without any: 0, 1.
        """
        stamps, now, last = self.sp.t_us[at], self.sp.value[at], self.sp.value[at - 1]
        low = max(int(self.pv.t_us.searchsorted(stamps[0], "right")) - BEHIND, 0)
        high = int(self.pv.t_us.searchsorted(stamps[-1], "right"))
        pv_us, pv = self.pv.t_us[low:high], self.pv.value[low:high]
        newest = np.searchsorted(pv_us, stamps, "right") - 1
        recent_us = stamps - min(self.windows.join_us, self.windows.before_us)
        left, reached = np.zeros(len(at)), np.where(newest < 0, 1.0, np.inf)
        for back in range(BEHIND):
            known = np.flatnonzero(newest >= back)
            if back > 0:
                known = known[pv_us[newest[known] - back] >= recent_us[known]]
            value = pv[newest[known] - back]
            distance = np.abs(now[known] - value)
            nearer = distance < reached[known]
            known = known[nearer]
            reached[known], left[known] = distance[nearer], np.abs(last[known] - value[nearer])
        return left, reached
