"""The historian: exception reports of the signals, as they would be archived.

In go the lanes' signals scan by scan; out go the reports: a value is reported when it has left the
last reported one by more than the deadband, or when nothing was reported for the heartbeat.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .lanes import Vector

HEARTBEAT_S = 570
SP_HEARTBEAT_S = 14_400
_LOOK_S = 30


@dataclass(frozen=True, eq=False)
class Reports:
    """Reports in order of time: ``scan`` [n]; ``signal`` [n] 0 pv, 1 output, 2 setpoint;
    ``lane`` [n]; ``value`` [n] in percent.
    """

    scan: NDArray[np.int64]
    signal: NDArray[np.int64]
    lane: NDArray[np.int64]
    value: Vector


class ExceptionReporting:
    """Watches signals [3, lanes] from scan ``first`` on; at that scan everything is reported.

    ``deadband`` [3, lanes] in percent. Silence lasts at most ``HEARTBEAT_S`` + 30 s for process
    variable and output, ``SP_HEARTBEAT_S`` + 30 s for the setpoint.
    """

    def __init__(self, deadband: Vector, scan_s: int, first: int = 0) -> None:
        self._deadband, self._first = deadband, first
        self._look = max(1, _LOOK_S // scan_s)
        self._last = np.full(deadband.shape, np.inf)
        self._last_scan = np.zeros(deadband.shape, np.int64)
        beats = np.array([HEARTBEAT_S, HEARTBEAT_S, SP_HEARTBEAT_S]) // scan_s
        self._beat = np.repeat(beats[:, None], deadband.shape[1], axis=1)
        self._away = np.zeros(deadband.shape)
        self._report = np.zeros(deadband.shape, bool)
        self._found: list[tuple[int, NDArray[np.intp], Vector]] = []

    def watch(self, scan: int, signals: Vector) -> None:
        """Report what is due at this scan."""
        if scan < self._first:
            return
        if scan == self._first:
            self._report[:] = True
        else:
            np.subtract(signals, self._last, out=self._away)
            np.abs(self._away, out=self._away)
            np.greater(self._away, self._deadband, out=self._report)
            if (scan - self._first) % self._look == 0:
                self._report |= scan - self._last_scan >= self._beat
        at = np.flatnonzero(self._report)
        if not at.size:
            return
        values = signals.ravel()[at]
        self._last.ravel()[at] = values
        self._last_scan.ravel()[at] = scan
        self._found.append((scan, at.astype(np.int32), values))

    def reports(self) -> Reports:
        """Everything reported so far."""
        lanes = self._deadband.shape[1]
        counts = [len(at) for _, at, _ in self._found]
        where = np.concatenate([at for _, at, _ in self._found]).astype(np.int64)
        return Reports(
            scan=np.repeat(np.array([scan for scan, _, _ in self._found], np.int64), counts),
            signal=where // lanes,
            lane=where % lanes,
            value=np.concatenate([values for _, _, values in self._found]),
        )


def unmoved(value: Vector, deadband: float) -> Vector:
    """Reports [n] of one signal in order of time, where those within the deadband of the value last
    reported (heartbeats) say that value again.
    """
    found = value.tolist()
    for at in range(1, len(found)):
        if abs(found[at] - found[at - 1]) <= deadband:
            found[at] = found[at - 1]
    return np.array(found)
