"""The process variable of one change, made ready: time from t0, value in parts of the change.

In: the record around a change. Out: a ``Curve``: 0 is the old setpoint and 1 the new one, so that
level, size and direction of the change are gone before anything is computed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.records import SECOND_US, Between, MeasureSettings, Record, Role, SetpointChange
from audit.response.archive import EVERY, Archive, Kept, recognise
from audit.response.constants import CONSTANTS
from audit.response.localfit import Array
from audit.response.order import differences, lower_quartile, median


@dataclass(frozen=True, eq=False)
class Curve:
    """Good samples of the process variable.

    ``t`` [n] s from t0, ``v`` [n] (y - r0) / (r1 - r0), the bounding samples included. ``hold``:
    the value holds between two of them. ``ft``, ``fv`` [m]: the same with long silences drawn as
    the signal runs between; ``a``, ``b``, ``wb``: point m is (1 - wb) v[a] + wb v[b]. ``step_s``:
    typical interval. ``before_s``: the record looked at begins at -before_s; ``window_s``: it ends
    there. ``archive``: how these samples came to be kept.
    """

    t: Array
    v: Array
    hold: bool
    step_s: float
    before_s: float
    window_s: float
    ft: Array
    fv: Array
    a: NDArray[np.int64]
    b: NDArray[np.int64]
    wb: Array
    archive: Archive = EVERY


def build(record: Record, change: SetpointChange, settings: MeasureSettings) -> Curve:
    """The curve of a change; one-sample spikes are left out.

    How it runs between two samples is as the archive that is seen in them has it, else as declared.
    """
    pv = record.of(Role.PV).around(change.at_us - settings.before_us, change.window_end_us)
    pv = pv.only_good()
    t = (pv.t_us - change.at_us) / SECOND_US
    v = (pv.value - change.sp_from) / change.size_eu
    keep = ~spikes(t, v)
    t, v = t[keep], v[keep]
    archive = recognise(t, v, change.window_s)
    hold = settings.reading.pv_between is Between.HOLD
    if archive.recognised:
        hold = archive.kept is Kept.EXCEPTION
    before_s = settings.before_us / SECOND_US
    step_s = typical_interval(t, -before_s, change.window_s)
    ft, a, b, wb = _fill(t, step_s, hold, change.window_s)
    fv = (1.0 - wb) * v[a] + wb * v[b]
    return Curve(t, v, hold, step_s, before_s, change.window_s, ft, fv, a, b, wb, archive)


def typical_interval(t: Array, from_s: float, to_s: float) -> float:
    """Lower quartile of the intervals inside from_s..to_s, s; 0 with fewer than two samples."""
    inside = t[(t >= from_s) & (t <= to_s)]
    if len(inside) < 2:
        return 0.0
    return lower_quartile(differences(inside))


def spikes(t: Array, v: Array) -> NDArray[np.bool_]:
    """Samples that stand out alone and briefly from neighbours that agree.

    Nothing else near stands out, and the next sample comes soon: the top of a peak that was
    reported once and then held is no spike.
    """
    flag = np.zeros(len(v), np.bool_)
    if len(v) < 7:
        return flag
    middle = 0.5 * (v[:-2] + v[2:])
    off = np.abs(v[1:-1] - middle)
    bend = v[2:] - 2.0 * v[1:-1] + v[:-2]
    sd = 1.4826 * median(np.abs(bend)) / np.sqrt(6.0)
    padded = np.pad(off, 3, mode="edge")
    near = np.max([padded[3 + k : 3 + k + len(off)] for k in (-3, -2, 2, 3)], axis=0)
    least = max(CONSTANTS.spike_sd * sd, CONSTANTS.spike_share)
    agree = np.abs(v[2:] - v[:-2]) < 0.25 * off
    length = differences(t)
    brief = length[1:] <= 1.5 * median(length)
    flag[1:-1] = (off > least) & (off > 4.0 * near) & agree & brief
    return flag


def _fill(
    t: Array, step_s: float, hold: bool, window_s: float
) -> tuple[Array, NDArray[np.int64], NDArray[np.int64], Array]:
    """Stamps with points put into long silences, and what each point is made of.

    A held value holds until one typical interval before the next sample: had it changed before
    then, that would have been reported.
    """
    n = len(t)
    if n == 0 or step_s <= 0:
        everything = np.arange(n)
        return t, everything, everything, np.zeros(n)
    ends = np.append(t[1:], max(window_s, float(t[-1])))
    length = ends - t
    spacing = np.maximum(step_s, length / CONSTANTS.fill_points)
    count = np.where(
        length > CONSTANTS.fill_ratio * step_s, np.ceil(length / spacing - 1e-9), 1
    ).astype(np.int64)
    count = np.maximum(count, 1)
    a = np.repeat(np.arange(n), count)
    nth = np.arange(len(a)) - np.repeat(np.cumsum(count) - count, count)
    b = np.minimum(a + 1, n - 1)
    if hold:
        kept = (length - step_s) / np.maximum(count - 1, 1)
        return t[a] + nth * kept[a], a, b, np.zeros(len(a))
    share = nth / count[a]
    return t[a] + share * length[a], a, b, share
