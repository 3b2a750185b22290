"""A sensor that is stuck: one value to the last digit where there was noise before.

In: a ``Curve``. Out: whether its window is such a record. A loop that does not answer shows its
noise all the same; a coarsely quantised measurement may rest within one step of its scale, and a
reporting deadband or a range's end hides noise too: none of these is taken for a stuck sensor.
"""

from __future__ import annotations

import numpy as np

from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.localfit import Array
from audit.response.order import differences, median

SAME = 1e-9
"""Values closer than this part of the change are one value."""


def is_stuck(curve: Curve, zero: float) -> bool:
    """Whether the window holds one value alone, though the samples before it scattered.

    Scatter counts from one step of the scale on (standard deviation): then no value would come
    thirty times in a row by chance. ``zero``: the value 0 EU in parts of the change, at which a
    measurement with a cut-off rests.
    """
    first = int(curve.t.searchsorted(0.0, "right"))
    stop = int(curve.t.searchsorted(curve.window_s, "right"))
    if stop - first < CONSTANTS.stuck_samples or curve.v[first] != curve.v[stop - 1]:
        return False
    window, held = curve.v[first:stop], float(curve.v[first])
    if bool((window != held).any()) or abs(held - zero) < SAME:
        return False
    start = int(curve.t.searchsorted(-curve.before_s, "left"))
    moved = np.flatnonzero(curve.v[start:first] != held)
    if len(moved) < CONSTANTS.stuck_noisy_samples:
        return False
    lead = slice(start, start + int(moved[-1]) + 1)
    t, v = curve.t[lead], curve.v[lead]
    as_often = median(differences(curve.t[first:stop])) <= 1.5 * median(differences(t))
    return as_often and _scatter(t, v) >= CONSTANTS.stuck_quanta * _quantum(v)


def _scatter(t: Array, v: Array) -> float:
    """Standard deviation about a straight line."""
    z = t - t.mean()
    off = v - v.mean()
    off = off - float(z @ off) / float(z @ z) * z
    return float(np.sqrt(off @ off / (len(off) - 2)))


def _quantum(v: Array) -> float:
    """The least distance between two of the values."""
    apart = differences(np.sort(v))
    return float(apart[apart > SAME].min(initial=np.inf))
