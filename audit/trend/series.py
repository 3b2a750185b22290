"""A loop's past steps in; per quantity a series on the scale its worsening is looked for on, out.

Times and unrest go by their logarithm, the decay ratio and the overshoot as they are, the
steady-state error by its size. On each scale larger is worse.
"""

from __future__ import annotations

import math
import statistics
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.records import TIMES, Loop, Measured, PastStep, Quantity

BY_LOGARITHM = (*TIMES, Quantity.UNREST)
LOOKED_AT = (
    Quantity.RISE_TIME,
    Quantity.SETTLING_TIME,
    Quantity.OVERSHOOT,
    Quantity.PEAK_TIME,
    Quantity.DECAY_RATIO,
    Quantity.STEADY_STATE_ERROR,
    Quantity.SETTLING_TIME_5PCT,
    Quantity.UNREST,
)
"""The quantities a loop is compared with its own past in."""

SHORTEST_S = 1e-3
CALM_OF_RANGE = 1e-3
"""Unrest under this share of the range is calm, and none calmer than another."""
TWO_SIDED_95 = 1.959964
AT_MOST, VALUE, AT_LEAST = -1, 0, 1


@dataclass(frozen=True)
class Scale:
    """How one quantity is looked at over time, in units of its scale (ln of seconds for times).

    ``typical``: standard deviation from step to step that loops usually show (times 10 %: common
    practice, no source); ``smallest``: the least that is believed; ``matters``: the worsening that
    is large enough to matter.
    """

    log: bool
    typical: float
    smallest: float
    matters: float


@dataclass(frozen=True, eq=False)
class Series:
    """The n steps in which one quantity is known, in time order.

    ``x`` [n] places on the scale; ``u`` [n] standard uncertainties there; ``bound`` [n] AT_MOST,
    VALUE or AT_LEAST; ``up`` [n] whether the setpoint rose.
    """

    steps: Sequence[PastStep]
    measured: Sequence[Measured]
    x: NDArray[np.float64]
    u: NDArray[np.float64]
    bound: NDArray[np.int8]
    up: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.x)


def series_of(steps: Sequence[PastStep], quantity: Quantity, least: float = SHORTEST_S) -> Series:
    """The series of a quantity from usable steps in time order.

    What goes by its logarithm is not told apart below ``least``, in the quantity's unit.

    Settling times in another band than the newest step's are left out: another band is another
    quantity.
    """
    if quantity is Quantity.SETTLING_TIME and steps:
        steps = [step for step in steps if step.band_pct == steps[-1].band_pct]
    signed = quantity is Quantity.STEADY_STATE_ERROR
    known: list[PastStep] = []
    sizes: list[Measured] = []
    for step in steps:
        measured = step.measured.get(quantity)
        if measured is not None and measured.known:
            known.append(step)
            sizes.append(size_of(measured) if signed else measured)
    places = np.array([_place(measured) for measured in sizes], np.float64).reshape(-1, 4)
    x, low, high = places[:, 0], places[:, 1], places[:, 2]
    if quantity in BY_LOGARITHM:
        x, low, high = (np.log(np.maximum(part, least)) for part in (x, low, high))
    return Series(
        known,
        sizes,
        x,
        np.maximum(high - low, 0.0) / (2 * TWO_SIDED_95),
        places[:, 3].astype(np.int8),
        np.array([step.sp_to >= step.sp_from for step in known], np.bool_),
    )


def least_of(quantity: Quantity, loop: Loop) -> float:
    """Below which value a quantity that goes by its logarithm is not told apart, in its unit."""
    if quantity is Quantity.UNREST and loop.span_eu:
        return CALM_OF_RANGE * abs(loop.span_eu)
    return SHORTEST_S


def scale_of(quantity: Quantity, loop: Loop, steps: Sequence[PastStep]) -> Scale:
    """The scale of a quantity on a loop; without a range the error's rests on its changes' size."""
    if quantity in TIMES:
        return Scale(log=True, typical=0.10, smallest=0.05, matters=math.log(1.2))
    if quantity is Quantity.UNREST:
        return Scale(log=True, typical=0.25, smallest=0.10, matters=math.log(3.0))
    if quantity is Quantity.OVERSHOOT:
        return Scale(log=False, typical=2.0, smallest=1.0, matters=5.0)
    if quantity is Quantity.DECAY_RATIO:
        return Scale(log=False, typical=0.05, smallest=0.03, matters=0.15)
    matters = error_that_matters(loop, steps)
    return Scale(log=False, typical=0.3 * matters, smallest=0.15 * matters, matters=matters)


def error_that_matters(loop: Loop, steps: Sequence[PastStep]) -> float:
    """0.5 % of the range, or without one 5 % of the median size of the changes, eu."""
    if loop.span_eu:
        return 0.005 * abs(loop.span_eu)
    return 0.05 * statistics.median(abs(step.sp_to - step.sp_from) for step in steps)


def size_of(error: Measured) -> Measured:
    """The size of a signed quantity with the interval of the size."""
    if error.low is None or error.high is None:
        if error.value is not None:
            return Measured(abs(error.value), how=error.how)
        least = max(error.low or 0.0, -(error.high or 0.0), 0.0)
        return Measured(low=least, how=error.how, why=error.why)
    ends = (abs(error.low), abs(error.high))
    low = 0.0 if error.low <= 0.0 <= error.high else min(ends)
    value = None if error.value is None else abs(error.value)
    return Measured(value, low, max(ends), error.how, error.why)


def _place(measured: Measured) -> tuple[float, float, float, int]:
    """Place, ends of the interval (equal where they tell nothing), and what the place is."""
    value, low, high = measured.value, measured.low, measured.high
    if value is None:
        if high is not None:
            return high, high, high, AT_MOST
        least = low or 0.0
        return least, least, least, AT_LEAST
    if low is None or high is None:
        return value, value, value, VALUE
    return value, low, high, VALUE
