"""A rise of fewer than four samples: what it still tells, and why there are no more.

In: a ``View`` and what was measured of it. Out: bounds of the rise time, reasons for the rest.
"""

from __future__ import annotations

import numpy as np

from audit.records import Measured, Quantity, Reason
from audit.response.archive import Kept, scan_s
from audit.response.constants import CONSTANTS
from audit.response.localfit import Array
from audit.response.screening import PEAKS, SETTLING, SHAPE
from audit.response.view import View


def why_sparse(view: View, rise_s: float) -> Reason:
    """Thinned out by an archive where its scan would have been enough, else never sampled."""
    scan = scan_s(view.curve.t)
    enough = scan > 0 and rise_s >= CONSTANTS.sparse_rise * scan
    return Reason.COMPRESSED if enough else Reason.TOO_SPARSE


def bounded(
    view: View, found: dict[Quantity, Measured], count: float, why: Reason
) -> dict[Quantity, Measured]:
    """Fewer than four samples a rise: the rise time is bounded, the shape between is unknown.

    A peak is broader than the rise: it is still seen with fewer. That it did not settle is not seen
    in what an archive left, nor in a few uneven samples.
    """
    curve = view.curve
    margin = CONSTANTS.cover_z * float(np.hypot(view.noise.total, view.level_u))
    real = np.isin(curve.ft, curve.t) & (curve.ft <= curve.window_s)
    low, high = _rise_bounds(curve.ft[real], view.x[real], margin)
    seen = count >= CONSTANTS.sparse_peak and why is Reason.TOO_SPARSE
    kept: tuple[Quantity, ...] = PEAKS if seen else ()
    open_end = np.inf if curve.archive.kept is Kept.EVERY else 0.0
    kept += tuple(q for q in SETTLING if (found[q].value or open_end) >= 10.0 * curve.step_s)
    lost = {q: Measured.missing(why) for q in SHAPE if q not in kept}
    return lost | {Quantity.RISE_TIME: Measured(low=low, high=high, how=view.how, why=why)}


def _rise_bounds(t: Array, x: Array, margin: float) -> tuple[float, float]:
    """Least and greatest rise time, s, that the samples allow.

    At most from the last sample surely below 10 % to the first surely above 90 %, at least from the
    first surely above 10 % after it to the last surely below 90 % before it.
    """
    above = np.flatnonzero((t > 0) & (x >= 0.9 + margin))
    stop = int(above[0]) if len(above) else len(t) - 1
    sure = np.flatnonzero(x[: stop + 1] <= 0.1 - margin)
    start = int(sure[-1]) if len(sure) else max(int(np.searchsorted(t, 0.0)) - 1, 0)
    between = np.arange(start + 1, stop)
    begun = between[x[between] >= 0.1 + margin]
    short = between[x[between] <= 0.9 - margin]
    least = float(t[short[-1]] - t[begun[0]]) if len(begun) and len(short) else 0.0
    return max(least, 0.0), float(t[stop]) - max(float(t[start]), 0.0)
