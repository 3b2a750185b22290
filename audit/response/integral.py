"""Integral of the absolute control error, trapezoid on the real stamps, noise part taken off.

In: a ``Curve``, the setpoint's moves. Out: IAE in parts of the change x s, with its uncertainty.
"""

from __future__ import annotations

import numpy as np
from scipy.special import erf

from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.localfit import Array
from audit.response.noise import Noise
from audit.response.order import differences
from audit.response.shape import boxcar


def absolute_error(
    curve: Curve,
    noise: Noise,
    moves: tuple[tuple[float, float], ...],
    end_s: float,
    level: float | None,
) -> tuple[float, float]:
    """Integral of |sp - y| over [0, end_s] and its standard uncertainty.

    ``moves``: (s from t0, setpoint after it in parts of the change), the first at 0. The
    setpoint holds between its moves; the process variable runs as the curve says. ``level``:
    where it ends, if it does.
    """
    at = np.array([t for t, _ in moves])
    held = np.array([value for _, value in moves])
    cuts = at[(at > 0) & (at < end_s)]
    inside = curve.ft[(curve.ft > 0) & (curve.ft < end_s)]
    grid = np.unique(np.concatenate([[0.0], inside, cuts, [end_s]]))
    sp = held[np.searchsorted(at, grid[:-1], "right") - 1]
    start, stop = _sides(curve, grid)
    width = differences(grid)
    left, right = start - sp, stop - sp
    plain = float(width @ (0.5 * (np.abs(left) + np.abs(right))))
    excess = _folded(0.5 * (left + right), noise, None if level is None else level - sp)
    value = max(plain - float(width @ excess), 0.0)
    count = int(((curve.t > 0) & (curve.t < end_s)).sum())
    step = end_s / max(count, 1)
    random = noise.sd * np.sqrt(noise.inflation * end_s * step)
    known = min(CONSTANTS.excess_doubt * noise.inflation, CONSTANTS.excess_doubt_cap)
    if noise.deadband > 0:
        known = CONSTANTS.excess_doubt_cap
    unsure = known + np.sqrt(0.5 * noise.inflation / max(count, 1))
    doubt = unsure * float(width @ excess) + noise.coarse * np.sqrt(end_s * step)
    idle = end_s
    if curve.hold or noise.deadband == 0:
        idle = float(width @ (np.abs(left) < 2.0 * noise.deadband))
    parts = (random, doubt, 0.5 * noise.coarse * idle, _sampling(curve, grid, left, right))
    return value, float(np.sqrt(sum(part**2 for part in parts)))


def _sides(curve: Curve, grid: Array) -> tuple[Array, Array]:
    """The process variable at the start and at the end of each interval of the grid.

    Of what was reported by exception the points say where it holds and where it runs.
    """
    if curve.hold and not curve.archive.recognised:
        place = np.searchsorted(curve.ft, grid[:-1], "right") - 1
        value = curve.fv[np.minimum(np.maximum(place, 0), len(curve.fv) - 1)]
        return value, value
    value = np.interp(grid, curve.ft, curve.fv)
    return value[:-1], value[1:]


def _sampling(curve: Curve, grid: Array, left: Array, right: Array) -> float:
    """Error of the trapezoid from what half the samples would have given (Richardson).

    Of a value that holds: it moved at any time until the next sample (uniform, of which the value
    is one end: JCGM 100).
    """
    size = np.append(np.abs(left), np.abs(right[-1:]))
    if curve.hold and not curve.archive.recognised:
        return abs(float(differences(grid) @ differences(size))) / float(np.sqrt(3.0))
    if len(grid) < 5:
        return 0.0
    some = np.unique(np.append(np.arange(0, len(grid), 2), len(grid) - 1))
    return abs(_area(size, grid) - _area(size[some], grid[some])) / 3.0


def _area(value: Array, at: Array) -> float:
    """Trapezoid."""
    return float(differences(at) @ (0.5 * (value[1:] + value[:-1])))


def _folded(error: Array, noise: Noise, final: Array | None) -> Array:
    """What noise adds to the mean of |error| (folded normal), its own error smoothed first."""
    if noise.sd <= 0:
        return np.zeros(len(error))
    smooth = boxcar(error, 9)
    smooth = np.where(np.abs(smooth) < noise.sd, boxcar(error, 41), smooth)
    if final is not None:
        reach = 2.5 * noise.sd * np.sqrt(min(1.0, noise.inflation / 9.0))
        near = np.abs(boxcar(error, 9) - final) < reach
        smooth = np.where(near, final, smooth)
    size = np.abs(smooth)
    ratio = size / noise.sd
    narrow = noise.sd * np.sqrt(2.0 / np.pi) * np.exp(-0.5 * ratio**2)
    added: Array = narrow + size * erf(ratio / np.sqrt(2.0)) - size
    return np.maximum(added, 0.0)
