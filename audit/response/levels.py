"""The level before the change and the level it ends at, each with its uncertainty and drift.

In: a ``Curve`` and its ``Noise``. Out: ``Level`` values in parts of the change.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from audit.response.archive import ALIKE
from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.localfit import Array
from audit.response.noise import Noise
from audit.response.order import clamped, differences

TAILS = ((0.5, 0.7), (0.25, 1.4), (0.1, 3.5))
"""Shares of the time to the end that are tried as the final stretch; how much of a stretch's own
drift is still to come if it goes on for a third of the time so far."""
LEADS = ((1.0, 0.25), (0.5, 0.25), (0.25, 0.25))
"""Shares of the time before the change that are tried as the stretch y0 is taken from; how unsure
the level at its end is, of its drift."""


@dataclass(frozen=True)
class Level:
    """A level, its standard uncertainty, and what moved while it was taken.

    ``chance``: the part of u that is noise and recording. ``drift``: change over the stretch
    beyond chance, signed; ``rate``: the same per s. ``swing``: rms of slow swings beyond chance.
    ``samples``: how many lie inside.
    """

    value: float
    u: float
    chance: float
    drift: float
    rate: float
    swing: float
    samples: int


@dataclass(frozen=True)
class Stretch:
    """A stretch that ends where all do: its length, s, and its level."""

    length_s: float
    level: Level


def leads(curve: Curve, noise: Noise) -> list[Stretch]:
    """Stretches of [-before, 0] that end at 0, the longest first; none without any sample.

    The level of each is the one reached at its end: a drift beyond chance is followed to it.
    """
    found = _stretches(curve, noise, -curve.before_s, 0.0, LEADS)
    return [
        replace(one, level=replace(one.level, value=one.level.value + 0.5 * one.level.drift))
        if one.level.drift
        else one
        for one in found
    ]


def final(
    curve: Curve, noise: Noise, from_s: float, end_s: float, least_s: float = 0.0
) -> Level | None:
    """The level at the end of from_s..end_s; None without any sample to take it from."""
    return least_uncertain(_stretches(curve, noise, from_s, end_s, TAILS), least_s)


def least_uncertain(stretches: list[Stretch], least_s: float = 0.0) -> Level | None:
    """Of several stretches with one end the level with the least uncertainty.

    What moved long before is no matter then. None shorter than ``least_s`` but the longest, so
    that a swing is not taken for a level where it turns.
    """
    best: Level | None = None
    for stretch in stretches:
        found = stretch.level
        if best is None:
            best = found
        elif stretch.length_s >= least_s and found.samples >= CONSTANTS.dwell_samples:
            best = found if found.u < 0.98 * best.u else best
    return best


def _stretches(
    curve: Curve,
    noise: Noise,
    from_s: float,
    end_s: float,
    tried: tuple[tuple[float, float], ...],
) -> list[Stretch]:
    """The stretches that are these shares of from_s..end_s, what drifts ahead in their u."""
    upto = int(curve.t.searchsorted(end_s, "right"))
    if upto == 0:
        return []
    t, v = curve.t[:upto], curve.v[:upto]
    stretches = []
    for share, ahead in tried:
        length = share * (end_s - from_s)
        found = level(t, v, end_s - length, end_s, curve.hold, noise)
        if found.drift:
            found = replace(found, u=float(np.hypot(found.u, ahead * found.drift)))
        stretches.append(Stretch(length, found))
    return stretches


def level(t: Array, v: Array, lo: float, hi: float, hold: bool, noise: Noise) -> Level:
    """The level of t, v [n] over lo..hi."""
    first = max(int(t.searchsorted(lo, "right")) - 1, 0)
    t, v = t[first:], v[first:]
    weight = _durations(t, lo, hi, hold)
    used = weight > 0
    if not bool(used.any()):
        weight = np.where(np.arange(len(t)) == len(t) - 1, 1.0, 0.0)
        used = weight > 0
    t, v, weight = t[used], v[used], weight[used] / weight[used].sum()
    value = _robust_mean(v, weight)
    inside = int(((t >= lo) & (t <= hi)).sum())
    count = max(1.0, 1.0 / float(weight @ weight))
    chance = noise.sd * np.sqrt(min(noise.inflation / count, 1.0))
    drift, swing = _motion(t, v, weight, noise)
    chance = float(np.hypot(chance, noise.coarse))
    spread = float(np.sqrt(weight @ (v - value) ** 2 / count))
    u = np.sqrt(max(chance, spread) ** 2 + (0.3 * drift) ** 2 + (0.3 * swing) ** 2)
    return Level(value, float(u), chance, drift, drift / max(hi - lo, 1e-9), swing, inside)


def _durations(t: Array, lo: float, hi: float, hold: bool) -> Array:
    """Seconds of lo..hi that each sample stands for."""
    if hold:
        edges = np.append(t, max(hi, float(t[-1])))
    else:
        edges = np.concatenate([[-np.inf], 0.5 * (t[1:] + t[:-1]), [np.inf]])
    edges = clamped(edges, lo, hi)
    return differences(edges)


def _robust_mean(v: Array, weight: Array) -> float:
    """Mean with samples beyond 3.5 robust sd of the median drawn in (Huber's one step)."""
    order = np.argsort(v, kind="stable")
    middle = float(v[order][np.searchsorted(np.cumsum(weight[order]), 0.5 - 1e-12)])
    off = v - middle
    far = np.sort(np.abs(off))
    robust = 1.4826 * float(far[len(far) // 2])
    if robust > ALIKE:
        reach = CONSTANTS.hampel_clip * robust
        off = clamped(off, -reach, reach)
    return middle + float(weight @ off)


def _motion(t: Array, v: Array, weight: Array, noise: Noise) -> tuple[float, float]:
    """Drift, signed, and slow swing beyond chance over a stretch."""
    if len(t) < 4:
        return 0.0, 0.0
    z = t - float(weight @ t)
    spread = float(weight @ (z * z))
    if spread <= 0:
        return 0.0, 0.0
    mean = float(weight @ v)
    slope = float(weight @ (z * (v - mean))) / spread
    length = float(t[-1] - t[0])
    count = max(2.0, 1.0 / float(weight @ weight))
    error = noise.sd * np.sqrt(noise.inflation / count) * length / np.sqrt(spread)
    error = float(np.hypot(error, noise.coarse))
    drift = slope * length
    beyond = float(np.copysign(np.sqrt(max(0.0, drift**2 - 4.0 * error**2)), drift))
    left = v - mean - slope * z
    swing = float(np.sqrt(max(0.0, float(weight @ (left * left)) - 1.3 * noise.sd**2)))
    return beyond, swing
