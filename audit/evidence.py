"""Intervals in, decisions and medians out: the arithmetic verdict, trend and ranking share.

Stands beside the vocabulary: it imports records alone and knows no loop, step or store.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

from audit.records import Measured, Outcome, Quantity

PEAK_BOUND = (Quantity.PEAK_TIME, Quantity.DECAY_RATIO)
"""Quantities that without a peak do not apply, which counts as met."""

SIGNED = (Quantity.STEADY_STATE_ERROR,)
"""Quantities with a sign, whose limit is a maximum of their size."""

COVERAGE = 0.95
FEWEST_FOR_ORDER = 6
"""With fewer values no two order statistics enclose a median with 95 % (1 - 2/2^5 = 0.9375)."""


def decide(measured: Measured, limit: float, signed: bool) -> Outcome:
    """One quantity against its limit, by guarded acceptance and guarded rejection.

    In spec if all of the 95 % interval keeps the limit, out of spec if none of it does, else
    undecided (JCGM 106:2012, decision rules with guard bands; equal tails make each side a 97.5 %
    rule, stricter than the 95 % default of ISO 14253-1). ``limit`` is a maximum, in the quantity's
    unit; ``signed``: a maximum of the size, on both sides of zero. A value without any bound is
    undecided, nothing known is not measured.
    """
    if not measured.known:
        return Outcome.NOT_MEASURED
    low = -math.inf if measured.low is None else measured.low
    high = math.inf if measured.high is None else measured.high
    if high <= limit and (not signed or low >= -limit):
        return Outcome.IN_SPEC
    if low > limit or (signed and high < -limit):
        return Outcome.OUT_OF_SPEC
    return Outcome.UNDECIDED


@dataclass(frozen=True)
class MedianLevel:
    """The median of some measured values with its 95 % interval, in their unit.

    ``value`` None: only bounded. ``longer_than``: ``value`` is "at least", for it depends on how
    much longer those took of which no more than a lower bound is known.
    """

    value: float | None
    low: float | None
    high: float | None
    count: int
    longer_than: bool = False


def median_of(measured: Sequence[Measured], signed: bool = False) -> MedianLevel | None:
    """Median and interval of what is known; None where nothing is.

    From 6 values the order statistics that enclose the median with at least 95 % (binomial; the
    sign test turned round, common practice), below that from the smallest ``low`` to the largest
    ``high``. "Longer than" counts as at least that: its upper end is open. "At most" likewise has
    0 as its lower end, or none if ``signed``.
    """
    known = [one for one in measured if one.known]
    if not known:
        return None
    lowest = -math.inf if signed else 0.0
    least = sorted(_first(one.value, one.low, lowest) for one in known)
    most = sorted(_first(one.value, one.high, math.inf) for one in known)
    if len(known) >= FEWEST_FOR_ORDER:
        rank = order_rank(len(known))
        low, high = least[rank - 1], most[-rank]
    else:
        low = min(lowest if one.low is None else one.low for one in known)
        high = max(math.inf if one.high is None else one.high for one in known)
    at_least, at_most = _middle(least), _middle(most)
    longer = at_least != at_most and any(one.value is None and one.high is None for one in known)
    value = _finite(at_least) if longer or at_least == at_most else None
    return MedianLevel(value, _finite(low), _finite(high), len(known), longer)


@lru_cache(maxsize=256)
def order_rank(count: int) -> int:
    """The largest r for which the r-th smallest and r-th largest of ``count`` values enclose the
    median with at least 95 %: 1 - 2 P(B < r), B binomial(count, 1/2). At least 1.
    """
    rank, below = 1, 1
    while 1 - 2 * (below + math.comb(count, rank)) / 2**count >= COVERAGE:
        below += math.comb(count, rank)
        rank += 1
    return rank


def _middle(ordered: Sequence[float]) -> float:
    half = len(ordered) // 2
    if len(ordered) % 2:
        return ordered[half]
    return (ordered[half - 1] + ordered[half]) / 2


def _first(value: float | None, bound: float | None, otherwise: float) -> float:
    if value is not None:
        return value
    return otherwise if bound is None else bound


def _finite(bound: float) -> float | None:
    return bound if math.isfinite(bound) else None
