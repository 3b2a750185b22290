"""Many closed loops stepped together: process, controller and valve as vectors over lanes.

A lane is one piece of one loop's time. In go the ``Design`` of each lane and its inputs scan by
scan (setpoint, mode, noise, load); out go its signals (process variable, output, setpoint), all in
percent. Each scan: measure, compute the output, move the valve, advance the process by exact
zero-order-hold discretisation of two lags in series with a dead time of whole scans.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from .design import DERIVATIVE_FILTER, Design

Vector = NDArray[np.float64]
PV, OUT, SP = 0, 1, 2
SP_CENTRE = 50.0


class Lanes:
    """The state of ``n`` lanes; ``signals`` [3, n]: pv, output, setpoint in percent.

    ``noise`` [n] is set by the caller before each scan, ``manual`` and ``tracking`` (indices of
    lanes) and ``held`` [n] (their output) when they change.
    """

    def __init__(self, designs: Sequence[Design], counts: Sequence[int]) -> None:
        """One design after the other, the i-th for ``counts[i]`` lanes in a row."""
        self.n = int(sum(counts))
        self._counts = np.asarray(counts)
        self._designs = designs
        self.scan_s = designs[0].scan_s
        self.signals = np.zeros((3, self.n))
        self.noise = np.zeros(self.n)
        self.manual: NDArray[np.intp] = np.empty(0, np.intp)
        self.tracking: NDArray[np.intp] = np.empty(0, np.intp)
        self.held = np.zeros(self.n)
        self._set_process()
        self._set_controller()
        self._set_valve()
        self._work = np.zeros((4, self.n))

    def _each(self, name: str) -> Vector:
        values = np.array([float(getattr(design, name)) for design in self._designs])
        return np.repeat(values, self._counts)

    def _set_process(self) -> None:
        scan = float(self.scan_s)
        self._gain, self._lag, lag2 = self._each("gain"), self._each("lag_s"), self._each("lag2_s")
        self._integrating = self._each("integrating") > 0
        first = np.exp(-scan / np.maximum(self._lag, 1e-9))
        second = np.exp(-scan / np.maximum(lag2, 1e-9))
        spread = np.where(self._integrating, 1.0, self._lag - lag2)
        across = np.where(self._integrating, 0.0, self._lag / spread * (first - second))
        through = np.where(self._integrating, self._lag * (1 - first), across)
        self._p11, self._q1 = first, 1 - first
        self._p22 = np.where(self._integrating, 1.0, second)
        self._p21 = through
        self._q2 = np.where(self._integrating, scan - through, 1 - second - through)
        self._pivot_pv, self._pivot_out = self._each("pivot_pv"), self._each("pivot_out")
        self._per_load = np.where(self._integrating, self._gain, 1.0)
        self._bias, self._bias_slope = np.zeros(self.n), np.zeros(self.n)
        self.set_load(np.zeros(self.n), np.zeros(self.n))
        self._x1: Vector = np.zeros(self.n)
        self._x2: Vector = np.zeros(self.n)
        dead = np.rint(self._each("dead_s") / scan).astype(np.intp)
        depth = int(dead.max(initial=0)) + 1
        rows = (np.arange(depth)[:, None] - dead[None, :]) % depth
        self._delayed_at = rows * self.n + np.arange(self.n)[None, :]
        self._pipe = np.zeros((depth, self.n))

    def _set_controller(self) -> None:
        self._kc = self._each("kc")
        self._ki = self._kc * self.scan_s / self._each("ti_s")
        self._off_weight = self._kc * (1 - self._each("weight"))
        self._weighted = bool(np.any(self._off_weight != 0))
        filter_s = np.maximum(self._each("td_s") / DERIVATIVE_FILTER, self.scan_s)
        self._kd = self._kc * self._each("td_s") / filter_s
        self._follow = 1 - np.exp(-self.scan_s / filter_s)
        self._derivative = bool(np.any(self._kd != 0))
        reach = np.abs(self._off_weight) * 25.0
        self._i_low, self._i_high = -reach, 100.0 + reach
        self._integral, self._filtered = np.zeros(self.n), np.zeros(self.n)

    def _set_valve(self) -> None:
        self._travel = self._each("rate") * self.scan_s
        self._capacity = self._each("capacity")
        self._wanted, self._stem = np.zeros(self.n), np.zeros(self.n)
        stick, slide = self._each("stick"), self._each("slide")
        self._sticky = np.flatnonzero(stick > 0)
        self._stick, self._slide = stick[self._sticky], slide[self._sticky]
        self._residue, self._stuck = np.zeros(len(self._sticky)), np.zeros(len(self._sticky))

    @property
    def process(self) -> Vector:
        """The process variable [n] itself, without measurement noise, percent."""
        return self._x2

    def set_load(self, load: Vector, slope: Vector) -> None:
        """The load [n] now and its change a scan; pv percent, of a level output percent."""
        level = np.where(self._integrating, 0.0, self._pivot_pv)
        self._bias = level - self._gain * self._pivot_out + self._per_load * load
        self._bias_slope = self._per_load * slope

    def output_for(self, pv: Vector) -> Vector:
        """The output [n] that holds ``pv`` [n] at the present load, inside 0..100 percent."""
        wanted = np.where(self._integrating, 0.0, pv)
        return np.clip((wanted - self._bias) / self._gain, 0.0, 100.0)

    def rest(self, sp: Vector) -> None:
        """At rest at ``sp`` [n] in automatic, as far as the valve reaches."""
        self.signals[SP] = sp
        self.rest_with(self.output_for(sp))

    def rest_with(self, out: Vector) -> None:
        """At rest with output ``out`` [n]; a level rests at its setpoint."""
        self.signals[OUT] = out
        self._wanted[:] = out
        self._stem[:] = out
        flow = np.minimum(out, self._capacity)
        self._pipe[:] = flow
        drive = self._gain * flow + self._bias
        self._x2 = np.where(self._integrating, self.signals[SP], drive)
        self._x1 = drive
        self._stuck = self._stem[self._sticky]
        self._filtered[:] = self._x2
        self._integral = out + self._off_weight * (self.signals[SP] - SP_CENTRE)
        self.held[:] = out
        self.signals[PV] = self._x2

    def control(self) -> None:
        """Measure and compute the output of this scan."""
        pv, out, sp = self.signals
        prop, err, work, _ = self._work
        np.add(self._x2, self.noise, out=pv)
        if self.tracking.size:
            sp[self.tracking] = pv[self.tracking]
        np.subtract(sp, pv, out=err)
        np.multiply(self._ki, err, out=work)
        self._integral += work
        np.maximum(self._integral, self._i_low, out=self._integral)
        np.minimum(self._integral, self._i_high, out=self._integral)
        np.multiply(self._kc, err, out=prop)
        if self._weighted:
            prop -= self._off_weight * (sp - SP_CENTRE)
        if self._derivative:
            prop -= self._kd * (pv - self._filtered)
            self._filtered += self._follow * (pv - self._filtered)
        np.add(prop, self._integral, out=out)
        np.maximum(out, 0.0, out=out)
        np.minimum(out, 100.0, out=out)
        if self.manual.size:
            out[self.manual] = self.held[self.manual]
            self._integral[self.manual] = out[self.manual] - prop[self.manual]

    def valve(self) -> Vector:
        """Move the valve towards the output; return what flows through it [n], percent.

        Stiction: the two-parameter model of He, Wang, Pottmann and Qin, Ind. Eng. Chem. Res. 46
        (2007) 4549-4560 (from memory): the stem moves only when the force saved up since it
        stopped exceeds the static band, and then stops short by the kinetic one.
        """
        work = self._work[2]
        flow: Vector = self._work[3]
        before = self._wanted[self._sticky]
        np.subtract(self.signals[OUT], self._wanted, out=work)
        np.maximum(work, -self._travel, out=work)
        np.minimum(work, self._travel, out=work)
        self._wanted += work
        self._stem[:] = self._wanted
        if self._sticky.size:
            self._slip(before)
        np.minimum(self._stem, self._capacity, out=flow)
        return flow

    def _slip(self, before: Vector) -> None:
        at = self._sticky
        wanted = self._wanted[at]
        saved = self._residue + (wanted - before)
        slips = np.abs(saved) > self._stick
        rest = np.sign(saved) * self._slide
        self._stuck = np.where(slips, wanted - rest, self._stuck)
        self._stem[at] = self._stuck
        self._residue = np.where(slips, rest, saved)

    def advance(self, scan: int, flow: Vector) -> None:
        """Let the process run one scan with ``flow`` [n] percent through the valve."""
        row = scan % len(self._pipe)
        drive, work = self._work[0], self._work[1]
        self._pipe[row] = flow
        np.take(self._pipe.ravel(), self._delayed_at[row], out=drive, mode="clip")
        drive *= self._gain
        drive += self._bias
        self._bias += self._bias_slope
        np.multiply(self._p22, self._x2, out=self._x2)
        np.multiply(self._p21, self._x1, out=work)
        self._x2 += work
        np.multiply(self._q2, drive, out=work)
        self._x2 += work
        np.multiply(self._p11, self._x1, out=self._x1)
        drive *= self._q1
        self._x1 += drive
