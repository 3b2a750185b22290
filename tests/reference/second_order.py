"""Closed forms of the standard second-order step response, K = 1, and exact values from them.

y'' + 2 z w y' + w² y = w² r; z damping ratio, w undamped natural frequency in rad/s. Textbook
formulas (any of Ogata, Nise, Franklin); exact crossings by bracketed root finding on the formula.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

Array = NDArray[np.float64]


def response(t: Array, z: float, w: float = 1.0) -> Array:
    """Unit step response at t [s], 0 before t = 0."""
    t = np.maximum(t, 0.0)
    if z < 1.0:
        wd = w * np.sqrt(1.0 - z * z)
        swing = np.cos(wd * t) + z / np.sqrt(1.0 - z * z) * np.sin(wd * t)
        return np.asarray(1.0 - np.exp(-z * w * t) * swing)
    if z == 1.0:
        return np.asarray(1.0 - np.exp(-w * t) * (1.0 + w * t))
    root = np.sqrt(z * z - 1.0)
    p1, p2 = w * (z - root), w * (z + root)
    return np.asarray(1.0 - (p2 * np.exp(-p1 * t) - p1 * np.exp(-p2 * t)) / (p2 - p1))


def _at(z: float, w: float) -> Callable[[float], float]:
    return lambda t: float(response(np.array([t]), z, w)[0])


def first_crossing(level: float, z: float, w: float = 1.0) -> float:
    """When the response first reaches a level below 1, s."""
    y = _at(z, w)
    top = np.pi / (w * np.sqrt(1.0 - z * z)) if z < 1.0 else 200.0 * z / w
    return float(brentq(lambda t: y(t) - level, 0.0, top, xtol=1e-12))


def rise_time(z: float, w: float = 1.0) -> float:
    """10 to 90 %, s."""
    return first_crossing(0.9, z, w) - first_crossing(0.1, z, w)


def overshoot(z: float) -> float:
    """exp(-pi z / sqrt(1 - z²)), percent of the change; 0 from z = 1 on."""
    return 100.0 * float(np.exp(-np.pi * z / np.sqrt(1.0 - z * z))) if z < 1.0 else 0.0


def peak_time(z: float, w: float = 1.0) -> float:
    """pi / wd, s; z below 1."""
    return float(np.pi / (w * np.sqrt(1.0 - z * z)))


def decay_ratio(z: float) -> float:
    """Second overshoot over first."""
    return (overshoot(z) / 100.0) ** 2


def damped_period(z: float, w: float = 1.0) -> float:
    """2 pi / wd, s."""
    return 2.0 * peak_time(z, w)


def settling_time(band: float, z: float, w: float = 1.0) -> float:
    """Last entry into 1 +- band (a share of the change), s: root between the last extremes."""
    y = _at(z, w)
    if z >= 1.0:
        return first_crossing(1.0 - band, z, w)
    half = peak_time(z, w)
    k = int(np.floor(-np.log(band) * np.sqrt(1.0 - z * z) / (np.pi * z)))
    return float(
        brentq(lambda t: abs(y(t) - 1.0) - band, k * half + 1e-12, (k + 1) * half, xtol=1e-12)
    )


def absolute_error(z: float, w: float = 1.0) -> float:
    """Integral of |1 - y| over all time, s: 2 z / w without overshoot, else summed over swings."""
    if z >= 1.0:
        return 2.0 * z / w
    root = np.sqrt(1.0 - z * z)

    def integral(t: float) -> float:
        swing = 2.0 * z * np.cos(root * t) + (2.0 * z * z - 1.0) / root * np.sin(root * t)
        return float(-np.exp(-z * t) * swing)

    first = integral((np.pi - np.arccos(z)) / root)
    q = overshoot(z) / 100.0
    return (first - integral(0.0) + abs(first) * (1.0 + q) / (1.0 - q)) / w
