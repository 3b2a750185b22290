"""The first usable steps in; the loop's own normal, its scatter, how well both are known, out."""

from __future__ import annotations

import statistics
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.trend.series import AT_LEAST, AT_MOST, Scale, Series

PROVISIONAL = 10
"""Steps from which on there is a baseline; until it is full only gross changes are named."""
FULL = 30
EACH_WAY = 6
"""With so many baseline steps each way, steps are compared with those of their direction."""

NORMAL_MAD = 1.482602
NORMAL_P90 = 1.281552
MEDIAN_ERROR = 1.253314
"""Standard error of a normal sample's median, in standard deviations over the root of its size."""
PRIOR_STEPS = 10.0
"""How many steps the usual scatter of loops weighs against a loop's own."""
ALLOWANCE = 0.5
"""The reference value k of the cumulative sum, in standard deviations (Page 1954)."""
UNSURE = 1.645
WILD = 3.0
"""A single step counts as no more than so many standard deviations."""


@dataclass(frozen=True)
class Baseline:
    """What is normal for a loop, on the scale, for steps up (index 1) and down (index 0).

    ``taken``: indices of the steps it rests on. ``level``: medians by direction, or twice the
    pooled one. ``reference``: k of the cumulative sum, which allows for how well each is known.
    ``scatter``: standard deviation from step to step, measurement uncertainty in it; ``u``: the
    measurement uncertainty that is typical in it.
    """

    taken: tuple[int, ...]
    level: NDArray[np.float64]
    reference: NDArray[np.float64]
    by_direction: bool
    scatter: float
    u: float

    def tells(self, series: Series, part: slice) -> NDArray[np.bool_]:
        """False for an "at least" below the baseline: it may be anything."""
        above = series.x[part] >= self.level[series.up[part].astype(int)]
        tells: NDArray[np.bool_] = (series.bound[part] != AT_LEAST) | above
        return tells

    def excess(self, series: Series, part: slice) -> NDArray[np.float64]:
        """How much worse than normal steps were, on the scale; "at most" is never worse."""
        excess: NDArray[np.float64] = series.x[part] - self.level[series.up[part].astype(int)]
        return np.where(series.bound[part] == AT_MOST, np.minimum(excess, 0.0), excess)

    def scores(self, series: Series, part: slice) -> NDArray[np.float64]:
        """The excess in standard deviations, held to +-WILD; larger uncertainty makes it less."""
        more = np.maximum(series.u[part] ** 2 - self.u**2, 0.0)
        scores: NDArray[np.float64] = self.excess(series, part) / np.sqrt(self.scatter**2 + more)
        return np.clip(scores, -WILD, WILD)

    def references(self, series: Series, part: slice) -> NDArray[np.float64]:
        references: NDArray[np.float64] = self.reference[series.up[part].astype(int)]
        return references


def first_baseline(series: Series) -> int | None:
    """How many of the first steps make the first baseline: PROVISIONAL, or as many more, up to
    FULL, as it takes for fewer than half to be an "at least". None where they are not there.
    """
    least = np.cumsum(series.bound[:FULL] == AT_LEAST).tolist()
    for count in range(PROVISIONAL, len(least) + 1):
        if 2 * least[count - 1] < count:
            return count
    return None


def baseline_of(series: Series, taken: Sequence[int], scale: Scale) -> Baseline:
    """The baseline that some steps make.

    Level: median, of each direction where both have EACH_WAY steps. Scatter: from the median
    absolute deviation (1.4826 MAD, common practice) or the upper decile, whichever is larger, for
    settling times are often two-humped; never below what loops usually show weighed in, the
    typical measurement uncertainty, or the scale's least.
    """
    told = _informative(series, np.array(taken))
    x, up = series.x[told], series.up[told].astype(int)
    counts = np.bincount(up, minlength=2)
    by_direction = bool(counts.min() >= EACH_WAY)
    if by_direction:
        level = np.array([_median(x[up == way]) for way in (0, 1)])
    else:
        level, counts = np.full(2, _median(x)), np.full(2, len(x))
    own = _spread(x - level[up])
    weighed = (len(x) * own**2 + PRIOR_STEPS * scale.typical**2) / (len(x) + PRIOR_STEPS)
    u = _median(series.u[told])
    reference = ALLOWANCE + UNSURE * MEDIAN_ERROR / np.sqrt(counts)
    scatter = max(own, weighed**0.5, scale.smallest, u)
    return Baseline(tuple(taken), level, reference, by_direction, scatter, u)


def _informative(series: Series, taken: NDArray[np.int64]) -> NDArray[np.int64]:
    """Without the "at least" below the median of the values: they say nothing on the level."""
    least = series.bound[taken] == AT_LEAST
    if least.all():
        return taken
    telling = ~least | (series.x[taken] >= _median(series.x[taken[~least]]))
    told: NDArray[np.int64] = taken[telling]
    return told


def _spread(residuals: NDArray[np.float64]) -> float:
    """Robust standard deviation of what is centred on its median (small samples: n/(n - 0.8))."""
    count = len(residuals)
    mad = NORMAL_MAD * _median(np.abs(residuals)) * count / (count - 0.8)
    ordered: list[float] = sorted(residuals.tolist())
    return max(mad, ordered[round(0.9 * (count - 1))] / NORMAL_P90)


def _median(values: NDArray[np.float64]) -> float:
    """As numpy's, quicker for the few values of a baseline."""
    median: float = statistics.median(values.tolist())
    return median
