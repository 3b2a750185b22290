"""What happens to each loop over the record: its fault, its repair, or that nobody looks after it.

In go a plant loop, its design, the length of the record and a random generator; out goes a
``Story``. Times are in whole days from the first (UTC) midnight of the record.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .design import DRIFTING, QUANTITIES, Design, full_size, spoiled
from .plant import PUT_RIGHT, PlantLoop

_PARKED_FROM = {"FIC-3150": (0.56, 0.64), "TIC-5121": (0.72, 0.80)}
"""Loops left in manual to the end, from between these shares of the record on: of 90 days one for
more than a month, so that no step of it counts any more, one for three weeks.
"""


@dataclass(frozen=True)
class Fault:
    """A physical cause. ``size`` as in ``design.full_size``; grows from ``starts`` to ``full``.

    ``right``: the day from which it is mended, ``remedy``: how; None where it stays.
    """

    cause: str
    size: float
    starts: int
    full: int
    right: int | None
    remedy: str | None

    def progress(self, day: float) -> float:
        """Share of the full size on ``day``, 0 to 1."""
        if day < self.starts or (self.right is not None and day >= self.right):
            return 0.0
        if day >= self.full:
            return 1.0
        return (day - self.starts) / (self.full - self.starts)


@dataclass(frozen=True)
class Story:
    """One loop's fate. Days count from the start of the record; None where it does not apply."""

    fault: Fault | None = None
    never_met: bool = False
    cut_short: bool = False
    parked: int | None = None
    tag_dead: int | None = None

    def design_at(self, healthy: Design, day: float) -> Design:
        """The loop as it is on ``day`` (the part of it that the day has)."""
        if self.fault is None:
            return healthy
        share = self.fault.progress(day)
        if share <= 0.0:
            return healthy
        return spoiled(healthy, self.fault.cause, share * self.fault.size)


def tell(loop: PlantLoop, healthy: Design, days: int, rng: np.random.Generator) -> Story:
    """The story of ``loop``: its kind stands in the plant's table, its time and size are drawn."""
    if loop.story in QUANTITIES:
        return Story(fault=_fault(loop, healthy, days, rng))
    return Story(
        never_met=loop.story == "never_met",
        cut_short=loop.story == "cut_short",
        parked=_day(days, rng, *_PARKED_FROM[loop.tag]) if loop.tag in _PARKED_FROM else None,
        tag_dead=_day(days, rng, 0.84, 0.92) if loop.story == "dead_tag" else None,
    )


def _day(days: int, rng: np.random.Generator, low: float, high: float) -> int:
    """A day between two shares of the record, neither its first nor after its last.

    Of 90 days, 0.3 is day 27.
    """
    return min(max(1, round(days * float(rng.uniform(low, high)))), days - 1)


def _fault(loop: PlantLoop, healthy: Design, days: int, rng: np.random.Generator) -> Fault:
    mended = loop.tag in PUT_RIGHT
    drifting = loop.story in DRIFTING
    starts = _day(days, rng, 0.30, 0.36 if mended else 0.44 if drifting else 0.60)
    full = starts
    if drifting:
        full += _day(days, rng, 0.24, 0.26 if mended else 0.40)
    mended_on = max(full + 1, _day(days, rng, 0.70, 0.76))
    right = mended_on if mended and mended_on < days else None
    return Fault(
        cause=loop.story,
        size=full_size(healthy, loop.story, rng),
        starts=starts,
        full=full,
        right=right,
        remedy=PUT_RIGHT[loop.tag] if right is not None else None,
    )
