"""Crossings and extrema of the response, from local fits and never from one raw sample.

In: a ``Curve`` seen as x = (y - y0) / (y_end - y0), and its noise in the same unit. Out: the rise,
and the turning points with their standard uncertainties. Reference levels 10 and 90 % as in IEEE
Std 181; first crossings, counted from the last time below 10 % before the first 50 %.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.localfit import Array, Fit, fit
from audit.response.noise import Noise, value_sd
from audit.response.order import clamped, differences

SLOPE_OF_VALUE = 1.31
"""sd of a fitted slope x half-width / sd of the fitted value, Epanechnikov weights, quadratic."""


@dataclass(frozen=True)
class Look:
    """A first look: crossings of 10 and 90 %, s, where there are any."""

    t10: float | None
    t90: float | None

    @property
    def rise_s(self) -> float | None:
        return None if self.t10 is None or self.t90 is None else self.t90 - self.t10


@dataclass(frozen=True)
class Crossing:
    """A refined crossing: when, s; slope of x there, 1/s; sd of x there."""

    t: float
    slope: float
    sd: float


@dataclass(frozen=True, eq=False)
class Path:
    """The smoothed response: ``t`` [m] s, ``x`` [m], ``sd`` of one value, turning points [k]."""

    t: Array
    x: Array
    sd: float
    turns: NDArray[np.int64]
    turn_t: Array
    turn_x: Array
    turn_sd: Array
    turn_t_sd: Array


def boxcar(x: Array, width: int) -> Array:
    """Centred running mean over an odd number of points, shorter at the ends."""
    if width <= 1 or len(x) <= 2:
        return x
    half = width // 2
    total = np.concatenate([[0.0], np.cumsum(x)])
    place = np.arange(len(x))
    reach = np.minimum(half, np.minimum(place, len(x) - 1 - place))
    mean: Array = (total[place + reach + 1] - total[place - reach]) / (2 * reach + 1)
    return mean


def first_look(curve: Curve, x: Array, noise: Noise) -> Look:
    """Crossings of a running mean that brings the noise down to 3 % of the change.

    Where such a mean would be as long as the rise itself (noise that swings slowly) a shorter one
    has to do.
    """
    width = int(np.ceil((noise.sd / CONSTANTS.coarse_sd) ** 2 * noise.inflation)) | 1
    width = min(width, len(x) // 4 | 1)
    start = max(int(np.searchsorted(curve.ft, 0.0, "right")) - 1, 0)
    stop = int(np.searchsorted(curve.ft, curve.window_s, "right"))
    t = curve.ft[start:stop]
    while True:
        look = _levels_crossed(t, boxcar(x, width)[start:stop])
        rise = look.rise_s
        if width <= 3 or rise is None or rise >= CONSTANTS.look_rises * width * curve.step_s:
            return look
        width = width // 2 | 1


def _levels_crossed(t: Array, s: Array) -> Look:
    """First crossings of 10 and 90 %, the former before the first of 50 %."""
    high = np.flatnonzero(s >= 0.5)
    if len(high) == 0:
        low = np.flatnonzero(s >= 0.1)
        return Look(_cross(t, s, int(low[0]), 0.1) if len(low) else None, None)
    half = int(high[0])
    below = np.flatnonzero(s[: half + 1] < 0.1)
    t10 = _cross(t, s, int(below[-1]) + 1, 0.1) if len(below) else max(float(t[0]), 0.0)
    above = np.flatnonzero(s[half:] >= 0.9)
    t90 = _cross(t, s, half + int(above[0]), 0.9) if len(above) else None
    return Look(t10, t90)


def _cross(t: Array, s: Array, at: int, level: float) -> float:
    """When s crosses a level between the points at - 1 and at, s; not before t0."""
    if at == 0:
        return max(float(t[0]), 0.0)
    share = (level - s[at - 1]) / (s[at] - s[at - 1])
    return max(float(t[at - 1] + share * (t[at] - t[at - 1])), 0.0)


def samples_a_rise(curve: Curve, t10: float, t90: float) -> float:
    """Rise time over the mean interval of the samples that span it.

    A sample from long before or after (a level reported once and then held) spans nothing.
    """
    t = curve.t
    first = max(int(np.searchsorted(t, t10, "right")) - 1, 0)
    last = min(int(np.searchsorted(t, t90, "left")), len(t) - 1)
    far = CONSTANTS.fill_ratio * curve.step_s
    if last - first > 1 and t10 - t[first] > far:
        first += 1
    if last - first > 1 and t[last] - t90 > far:
        last -= 1
    if last <= first:
        return 0.0
    return (t90 - t10) * (last - first) / float(t[last] - t[first])


def half_width(curve: Curve, rise_s: float, noise: Noise) -> float:
    """Half-width of the local fit, s: where its bias and its noise weigh about the same.

    A local quadratic's bias grows with the fourth power of its width, its variance falls with it
    (Fan and Gijbels, Local Polynomial Modelling; constants for a second-order response).
    """
    step = max(curve.step_s, 1e-9)
    count = max(rise_s / step, 1.0)
    eta = (CONSTANTS.eta_gain * noise.total / np.sqrt(count)) ** (1.0 / 4.5)
    eta = min(float(eta), CONSTANTS.eta_cap)
    return max(eta * rise_s, CONSTANTS.least_half_samples * step)


def crossings(
    curve: Curve, x: Array, noise: Noise, look: tuple[float, float], half: float
) -> tuple[Crossing, Crossing]:
    """The crossings of 10 and 90 % from local fits; none reaches back over the response's start."""
    t10, t90 = look
    level = np.array([0.1, 0.9])
    floor = min(max(0.01, 2.5 * noise.sd), 0.06)
    quiet = np.flatnonzero((curve.ft < t10) & (x <= floor))
    start = float(curve.ft[quiet[-1]]) if len(quiet) else t10 - half
    step = curve.step_s
    place = np.array([t10, t90])
    for _ in range(2):
        reach = max(min(half, place[0] - start + 0.5 * step), 0.5 * step)
        left = np.array([reach, half])
        right = np.array([max(half, 3.2 * step), half])
        found = fit(curve.ft, x, place, left, right)
        place = place + clamped(_root(found, level), -0.5 * half, 0.5 * half)
        place = np.maximum(place, 0.0)
    found = fit(curve.ft, x, place, left, right)
    place = np.maximum(place + clamped(_root(found, level), -half, half), 0.0)
    sd = value_sd(found, noise, curve)
    least = 0.1 / max(t90 - t10, 1e-9)
    slope = np.maximum(found.slope, least)
    low, high = (Crossing(float(place[i]), float(slope[i]), float(sd[i])) for i in (0, 1))
    return low, high


def _root(found: Fit, level: Array) -> Array:
    """Step from each fit's place to where its parabola crosses the level upwards."""
    slope = np.maximum(found.slope, 1e-9)
    short = level - found.value
    inner = np.maximum(slope**2 + 4.0 * found.curvature * short, 0.0)
    root: Array = 2.0 * short / (slope + np.sqrt(inner))
    return root


def turning(x: Array, threshold: float) -> NDArray[np.int64]:
    """Places of alternating extremes, ends included, with every swing at least the threshold.

    Small swings go first, each with both its ends (as in rainflow counting, ASTM E1049).
    """
    step = differences(x)
    moving = np.flatnonzero(step != 0)
    if len(moving) == 0:
        return np.array([0], np.int64)
    sign = np.sign(step[moving])
    flips = np.flatnonzero(sign[1:] != sign[:-1])
    keep = np.concatenate([[0], moving[flips + 1], [len(x) - 1]]).astype(np.int64)
    while len(keep) > 2:
        swing = np.abs(differences(x[keep]))
        wall = np.concatenate([[np.inf], swing, [np.inf]])
        small = (swing < threshold) & (swing <= wall[:-2]) & (swing < wall[2:])
        if not bool(small.any()):
            break
        gone = np.zeros(len(keep), np.bool_)
        gone[:-1] |= small
        gone[1:] |= small
        gone[[0, -1]] = False
        keep = keep[~gone]
    return keep


def smooth(curve: Curve, x: Array, noise: Noise, end_s: float, half: float, rise_s: float) -> Path:
    """The response from t0 to end_s, smoothed, and its turning points refined."""
    inside = (curve.ft > 0) & (curve.ft < end_s)
    grid = np.concatenate([[0.0], curve.ft[inside], [end_s]])
    if len(grid) > CONSTANTS.grid_points:
        grid = np.linspace(0.0, end_s, CONSTANTS.grid_points)
    width = np.full(len(grid), half)
    start = np.maximum(np.minimum(grid, half), 0.6 * curve.step_s)
    found = fit(curve.ft, x, grid, start, width)
    values = found.value
    sd = float(value_sd(found.row(len(grid) // 2), noise, curve)[0])
    turns = turning(values, max(CONSTANTS.turn_sd * sd, 1e-7))
    where, value = grid[turns], values[turns]
    value_u, when_u = np.full(len(turns), sd), np.zeros(len(turns))
    if len(turns) > 2:
        refined = _extremes(curve, x, noise, where, half, rise_s)
        for kept, better in zip((where, value, value_u, when_u), refined, strict=True):
            kept[1:-1] = better
    return Path(grid, values, sd, turns, where, value, value_u, when_u)


def _extremes(
    curve: Curve, x: Array, noise: Noise, place: Array, half: float, rise_s: float
) -> tuple[Array, Array, Array, Array]:
    """Refine turning points but the ends: when, value, and their standard uncertainties.

    The top of a fitted parabola is too far out by var(slope) / (4 |curvature|) on the average: the
    place was chosen for being far out. That much is taken off.
    """
    apart = differences(place)
    near = np.minimum(apart[:-1], apart[1:])
    wide = min(CONSTANTS.eta_peak * half, max(CONSTANTS.eta_peak_cap * rise_s, half))
    reach = np.minimum(wide, np.maximum(0.45 * near, CONSTANTS.least_half_samples * curve.step_s))
    reach = np.maximum(reach, CONSTANTS.least_half_samples * curve.step_s)
    when = place[1:-1]
    for _ in range(3):
        found = fit(curve.ft, x, when, reach, reach)
        bend = np.where(np.abs(found.curvature) > 1e-12, found.curvature, 1e-12)
        move = clamped(-found.slope / (2.0 * bend), -0.5 * reach, 0.5 * reach)
        when = clamped(when + move, 0.0, curve.window_s)
        if bool((np.abs(move) < 0.2 * reach).all()):
            break
    found = fit(curve.ft, x, when, reach, reach)
    sd = value_sd(found, noise, curve)
    bend = np.maximum(2.0 * np.abs(found.curvature), 1e-12)
    slope_sd = SLOPE_OF_VALUE * sd / reach
    outward = np.minimum(slope_sd**2 / (2.0 * bend), sd) * np.sign(found.curvature)
    value = found.value + outward
    near = np.maximum(CONSTANTS.eta_when * reach, CONSTANTS.least_half_samples * curve.step_s)
    found = fit(curve.ft, x, when, near, near)
    move = clamped(-found.slope / np.copysign(bend, found.curvature), -0.5 * near, 0.5 * near)
    when = clamped(when + move, 0.0, curve.window_s)
    when_u = SLOPE_OF_VALUE * value_sd(found, noise, curve) / near / bend
    when_u = np.hypot(when_u, CONSTANTS.skew * near**2 / rise_s)
    return when, value, sd, np.minimum(when_u, reach)
