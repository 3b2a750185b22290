"""Median, quantile, differences and clamping of short arrays, without the general ones' overhead.

In: arrays of finite numbers. Out: the same numbers as numpy's functions of these names give.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def median(x: Array) -> float:
    """Median of at least one number."""
    half = len(x) // 2
    if len(x) % 2:
        return float(np.partition(x, half)[half])
    part = np.partition(x, (half - 1, half))
    return 0.5 * float(part[half - 1] + part[half])


def quantile(x: Array, share: float) -> float:
    """Quantile of at least one number, linear between order statistics."""
    place = share * (len(x) - 1)
    at = int(place)
    part = np.sort(x)
    low, high = float(part[at]), float(part[min(at + 1, len(x) - 1)])
    return low + (high - low) * (place - at)


def lower_quartile(x: Array) -> float:
    """The order statistic at or below the first quarter of at least one number."""
    at = (len(x) - 1) // 4
    return float(np.partition(x, at)[at])


def clamped(x: Array, low: Array | float, high: Array | float) -> Array:
    """x, not below low nor above high."""
    held: Array = np.minimum(np.maximum(x, low), high)
    return held


def differences(x: Array) -> Array:
    """Each number's distance from the one before."""
    return x[1:] - x[:-1]
