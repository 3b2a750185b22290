"""What a historian keeps of a signal: exception reporting, boxcar, swinging door. Indices out.

Written from the published definitions, each named at its function, and not from the project.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def by_exception(
    t: Array, y: Array, deadband: float, longest_s: float = np.inf, previous: bool = False
) -> list[int]:
    """Kept where |y - last reported y| > deadband, or nothing was reported for ``longest_s``.

    The absolute deadband of OPC UA Part 4 (DataChangeFilter); the longest silence is common
    practice. ``previous``: the sample before each report is kept too, with its own value (the
    boxcar of Hale and Sellars, Historical data recording for process computers, 1981).
    """
    kept = [0]
    last = 0
    for i in range(1, len(t)):
        away = abs(y[i] - y[last]) > deadband
        if away or t[i] - t[last] >= longest_s:
            if previous and away and kept[-1] != i - 1:
                kept.append(i - 1)
            kept.append(i)
            last = i
    return kept


def swinging_door(t: Array, y: Array, reach: float, longest_s: float = np.inf) -> list[int]:
    """Kept by swinging doors of +- ``reach`` that hang on the last kept sample.

    Bristol, US patent 4669097 (1987), and Swinging door trending: adaptive trend recording? (ISA,
    1990). This variant keeps the last sample before the doors stand open beyond parallel, with its
    own value; a segment lasts ``longest_s`` at the longest.
    """
    kept, origin, steepest, flattest = [0], 0, -np.inf, np.inf
    i = 1
    while i < len(t):
        span = t[i] - t[origin]
        steepest = max(steepest, (y[i] - reach - y[origin]) / span)
        flattest = min(flattest, (y[i] + reach - y[origin]) / span)
        if i - origin > 1 and (steepest > flattest or span > longest_s):
            origin = i - 1
            kept.append(origin)
            steepest, flattest = -np.inf, np.inf
        else:
            i += 1
    return [*kept, len(t) - 1] if kept[-1] != len(t) - 1 else kept
