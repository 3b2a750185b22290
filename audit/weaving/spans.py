"""Closed spans of instants, and samples inside them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from audit.records import Samples, Span

__all__ = ["Span", "inside", "pick", "subtract", "union"]


def union(spans: Iterable[Span]) -> list[Span]:
    """The same instants as disjoint closed spans in order; touching ones are joined."""
    joined: list[Span] = []
    for start, end in sorted(spans):
        if joined and start <= joined[-1][1] + 1:
            joined[-1] = (joined[-1][0], max(joined[-1][1], end))
        else:
            joined.append((start, end))
    return joined


def subtract(spans: Iterable[Span], holes: Iterable[Span]) -> list[Span]:
    """What is left of the spans outside the holes, disjoint and in order."""
    left = union(spans)
    for hole_start, hole_end in union(holes):
        cut: list[Span] = []
        for start, end in left:
            if hole_end < start or hole_start > end:
                cut.append((start, end))
                continue
            if start < hole_start:
                cut.append((start, hole_start - 1))
            if hole_end < end:
                cut.append((hole_end + 1, end))
        left = cut
    return left


def inside(t_us: NDArray[np.int64], spans: Sequence[Span]) -> NDArray[np.bool_]:
    """Which stamps lie in one of the disjoint, ordered spans."""
    if not spans:
        return np.zeros(len(t_us), np.bool_)
    starts = np.array([start for start, _ in spans], np.int64)
    ends = np.array([end for _, end in spans], np.int64)
    at = np.searchsorted(starts, t_us, "right") - 1
    found: NDArray[np.bool_] = (at >= 0) & (t_us <= ends[np.maximum(at, 0)])
    return found


def pick(samples: Samples, chosen: NDArray[np.bool_]) -> Samples:
    """The chosen samples."""
    if bool(chosen.all()):
        return samples
    return Samples(samples.t_us[chosen], samples.value[chosen], samples.good[chosen])
