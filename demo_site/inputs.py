"""What drives the lanes scan by scan: operators' events, measurement noise, load.

In go the plans of the loops and how their time is cut into lanes (``Cut``); ``Inputs.feed`` puts
each scan's values into the lanes. A lane starts some hours early, at rest, with the same
setpoints, noise and load as the lane before it had then, so that by its own first scan it has
come to the same state and the pieces join.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from .lanes import SP, Lanes, Vector
from .operators import DAY_S, TO_AUTO, TO_MANUAL, TO_SP, Plan

GRID_S = 60
_NOISE_ROWS = 60


@dataclass(frozen=True)
class Cut:
    """How the record of ``loops`` loops is cut: ``pieces`` a loop of ``live_s`` seconds each, each
    with ``warm_s`` seconds before; scans every ``scan_s``. Lane = loop x pieces + piece.
    """

    loops: int
    days: int
    scan_s: int
    live_s: int
    warm_s: int

    @property
    def pieces(self) -> int:
        """Lanes a loop."""
        return self.days * DAY_S // self.live_s

    @property
    def warm(self) -> int:
        """Scans of a lane before its own time."""
        return self.warm_s // self.scan_s

    @property
    def scans(self) -> int:
        """Scans of a lane in all."""
        return (self.warm_s + self.live_s) // self.scan_s

    @property
    def lanes(self) -> int:
        return self.loops * self.pieces


def load_series(spread: Sequence[float], cut: Cut, rng: np.random.Generator) -> Vector:
    """The loads of the loops [loops, grid] each minute from ``warm_s`` before the record on.

    An Ornstein-Uhlenbeck drift of standard deviation ``spread`` and a memory of 6 h, with bumps
    (one in about five days, a quarter to one hour long), both through a lag of 5 minutes.
    """
    count = (cut.warm_s + cut.days * DAY_S) // GRID_S + 2
    keep = float(np.exp(-GRID_S / 21_600))
    shocks = rng.standard_normal((cut.loops, count)) * np.sqrt(1 - keep**2)
    shocks[:, 0] /= np.sqrt(1 - keep**2)
    drift = np.asarray(lfilter([1.0], [1.0, -keep], shocks, axis=1))
    for row in drift:
        for _ in range(int(rng.poisson(cut.days / 5))):
            start, lasts = int(rng.integers(0, count)), int(rng.integers(15, 60))
            row[start : start + lasts] += rng.uniform(1.0, 2.5) * rng.choice((-1.0, 1.0))
    follow = 1 - float(np.exp(-GRID_S / 300))
    initial = (1 - follow) * drift[:, :1]
    smooth, _ = lfilter([follow], [1.0, follow - 1], drift, axis=1, zi=initial)
    load: Vector = np.asarray(smooth) * np.asarray(spread)[:, None]
    return load


class Inputs:
    """Feeds ``lanes``; ``start`` must be called once before the first scan."""

    def __init__(
        self,
        cut: Cut,
        plans: Sequence[Plan],
        tracking: Sequence[bool],
        noise: Sequence[float],
        load: Vector,
        rng: np.random.Generator,
    ) -> None:
        self._cut, self._rng = cut, rng
        self._sigma = np.repeat(np.asarray(noise), cut.pieces)
        self._tracks = np.repeat(np.asarray(tracking, bool), cut.pieces)
        self._is_manual = np.zeros(cut.lanes, bool)
        self._load = self._lane_loads(load)
        self._shared = rng.standard_normal((cut.warm, cut.loops * (cut.pieces + 1)), np.float32)
        lane = np.arange(cut.lanes)
        self._own = lane + lane // max(cut.pieces, 1)
        self._rows = np.zeros((_NOISE_ROWS, cut.lanes))
        self._read_plans(plans)

    def _lane_loads(self, load: Vector) -> Vector:
        """[grid, lanes]: the minutes of each lane, from its early start on."""
        cut = self._cut
        minutes = (cut.warm_s + cut.live_s) // GRID_S + 1
        starts = np.arange(cut.pieces) * (cut.live_s // GRID_S)
        at = starts[:, None] + np.arange(minutes)[None, :]
        return np.ascontiguousarray(load[:, at].reshape(cut.lanes, minutes).T)

    def _read_plans(self, plans: Sequence[Plan]) -> None:
        """Initial state of each lane, and its events as (scan, lane, code, value) by scan."""
        cut = self._cut
        self.first_sp = np.zeros(cut.lanes)
        self._first_manual: dict[int, float] = {}
        found: list[tuple[int, int, int, float]] = []
        for loop, plan in enumerate(plans):
            times, codes, values = plan.columns()
            scans = np.ceil(times / cut.scan_s).astype(np.int64)
            for piece in range(cut.pieces):
                lane = loop * cut.pieces + piece
                begins = piece * (cut.live_s // cut.scan_s) - cut.warm
                first, last = (int(i) for i in np.searchsorted(scans, (begins, begins + cut.scans)))
                self._state_before(lane, plan.first_sp, codes[:first], values[:first])
                found += [
                    (int(scans[i]) - begins, lane, int(codes[i]), float(values[i]))
                    for i in range(first, last)
                ]
        found.sort(key=lambda event: event[0])
        self._events, self._next = found, 0

    def _state_before(
        self, lane: int, first_sp: float, codes: NDArray[np.int64], values: Vector
    ) -> None:
        moves = np.flatnonzero(codes == TO_SP)
        self.first_sp[lane] = values[moves[-1]] if moves.size else first_sp
        switches = np.flatnonzero(codes != TO_SP)
        if switches.size and codes[switches[-1]] == TO_MANUAL:
            self._first_manual[lane] = float(values[switches[-1]])

    def start(self, lanes: Lanes) -> None:
        """Put every lane at rest where its early start finds it."""
        lanes.set_load(self._load[0], np.zeros(self._cut.lanes))
        out = lanes.output_for(self.first_sp)
        for lane, pv in self._first_manual.items():
            self._is_manual[lane] = True
            out[lane] = lanes.output_for(np.full(self._cut.lanes, pv))[lane]
        lanes.signals[SP] = self.first_sp
        lanes.rest_with(out)
        self._switch(lanes)

    def feed(self, lanes: Lanes, scan: int) -> None:
        """Events, load and noise of this scan."""
        seconds = scan * self._cut.scan_s
        if seconds % GRID_S == 0:
            now, then = self._load[seconds // GRID_S], self._load[seconds // GRID_S + 1]
            lanes.set_load(now, (then - now) * (self._cut.scan_s / GRID_S))
        while self._next < len(self._events) and self._events[self._next][0] <= scan:
            self._happen(lanes, *self._events[self._next][1:])
            self._next += 1
        lanes.noise = self._noise(scan)

    def _happen(self, lanes: Lanes, lane: int, code: int, value: float) -> None:
        if code == TO_SP:
            lanes.signals[SP, lane] = value
            return
        self._is_manual[lane] = code != TO_AUTO
        if code == TO_MANUAL:
            lanes.held[lane] = lanes.output_for(np.full(self._cut.lanes, value))[lane]
        self._switch(lanes)

    def _switch(self, lanes: Lanes) -> None:
        lanes.manual = np.flatnonzero(self._is_manual)
        lanes.tracking = np.flatnonzero(self._is_manual & self._tracks)

    def _noise(self, scan: int) -> Vector:
        """White, from one store for the time two lanes share, else drawn in blocks."""
        cut = self._cut
        overlap = cut.scans - cut.warm
        if scan < cut.warm:
            return np.asarray(self._shared[scan, self._own] * self._sigma)
        if scan >= overlap:
            return np.asarray(self._shared[scan - overlap, self._own + 1] * self._sigma)
        row = (scan - cut.warm) % _NOISE_ROWS
        if row == 0:
            self._rng.standard_normal(out=self._rows)
            self._rows *= self._sigma
        row_values: Vector = self._rows[row]
        return row_values
