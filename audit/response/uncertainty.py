"""From a value and its standard uncertainty to what is reported.

In: values and standard uncertainties. Out: ``Measured`` with 95 % intervals, equal tails (JCGM 100;
for the settling time JCGM 101). First and honest; not calibrated yet.
"""

from __future__ import annotations

import hashlib

import numpy as np
from numpy.typing import NDArray

from audit.records import Measured, Reason
from audit.response.constants import CONSTANTS, METHOD_VERSION
from audit.response.localfit import Array


def interval(
    value: float, u: float, how: str, floor: float | None = None, ceiling: float | None = None
) -> Measured:
    """Value +- 1.96 u, kept inside what is possible."""
    low, high = value - CONSTANTS.cover_z * u, value + CONSTANTS.cover_z * u
    if floor is not None:
        value, low, high = (max(floor, part) for part in (value, low, high))
    if ceiling is not None:
        value, low, high = (min(ceiling, part) for part in (value, low, high))
    return Measured(value=float(value), low=float(low), high=float(high), how=how)


def from_draws(
    values: Array,
    known: NDArray[np.bool_],
    swing: NDArray[np.int64],
    end_s: float,
    how: str,
    why: Reason,
) -> Measured:
    """From draws, the first the nominal one; what is not known is "longer than" its value.

    Where the draws fall into several swings of the response, the interval holds 95 % of each swing
    that is not a rare one.
    """
    value = float(values[0])
    low, _ = _humps(values, swing)
    if not bool(known[0]):
        return Measured.longer_than(min(low, value), how, why)
    _, high = _humps(np.where(known, values, end_s), swing)
    return Measured(value=value, low=min(low, value), high=max(high, value), how=how)


def _humps(values: Array, swing: NDArray[np.int64]) -> tuple[float, float]:
    """Lowest 2.5 % and highest 97.5 % point over the swings that hold enough draws."""
    low, high = np.inf, -np.inf
    for which in np.unique(swing):
        part = values[swing == which]
        if len(part) >= CONSTANTS.hump_share * len(values):
            part = np.sort(part)
            out = int(0.025 * len(part))
            low, high = min(low, float(part[out])), max(high, float(part[-1 - out]))
    return low, high


def seed(at_us: int) -> int:
    """Seed of a change's random draws: the same for the same instant and method."""
    text = f"{at_us} {METHOD_VERSION}"
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:8], "big")
