"""Standings and trends in; how far a loop is from its limit or its own past, and the order, out."""

from __future__ import annotations

import statistics
from collections.abc import Sequence
from dataclasses import dataclass

from audit.evidence import SIGNED
from audit.records import (
    Group,
    LimitStanding,
    Loop,
    Outcome,
    PastStep,
    Quantity,
    Standing,
    StandingWord,
    Trend,
)

OVERSHOOT_FLOOR_PCT = 5.0
ERROR_FLOOR_OF_RANGE = 0.005
ERROR_FLOOR_OF_CHANGE = 0.05
"""Without a range: share of the median size of the changes."""
DECAY_FLOOR = 0.15
TIME_FLOOR_S = 1.0
"""Stands for one sample interval, which is not kept with the steps."""
WHOLE_CHANGE = 1.0
"""Distance of a loop that does not answer, where no limited time says more: the whole change."""

BY_CRITICALITY = (Group.UNDECIDED, Group.UNSEEN, Group.IN_SPEC)


@dataclass(frozen=True)
class Distance:
    """(median - reference) / max(reference, floor); ``kind`` of the reference: "limit",
    "baseline", or None without one.
    """

    value: float
    reference: float | None = None
    kind: str | None = None
    quantity: Quantity | None = None


def group_of(word: StandingWord, degraded: bool) -> Group:
    """The group of the list a standing belongs to."""
    if degraded:
        return Group.OUT_AND_CHANGED if word is StandingWord.OUT_OF_SPEC else Group.DEGRADING
    return {
        StandingWord.OUT_OF_SPEC: Group.NEVER_MET,
        StandingWord.UNDECIDED: Group.UNDECIDED,
        StandingWord.UNSEEN: Group.UNSEEN,
        StandingWord.IN_SPEC: Group.IN_SPEC,
    }[word]


def distance_of(
    group: Group,
    limits: Sequence[LimitStanding],
    trend: Trend,
    loop: Loop,
    steps: Sequence[PastStep],
) -> Distance | None:
    """The largest distance of the group's kind; None in the groups ordered by criticality alone."""
    if group in BY_CRITICALITY:
        return None
    if group is Group.DEGRADING:
        found = from_baseline(trend, loop, steps)
        return found[0] if found else Distance(0.0, kind="baseline")
    found = from_limits(limits, loop, steps)
    return found[0] if found else Distance(WHOLE_CHANGE)


def from_limits(
    limits: Sequence[LimitStanding], loop: Loop, steps: Sequence[PastStep]
) -> list[Distance]:
    """Distance of each quantity that is out of spec, farthest first."""
    found = []
    for one in limits:
        median = one.low if one.median is None else one.median
        if one.outcome is Outcome.OUT_OF_SPEC and median is not None:
            size = abs(median) if one.quantity in SIGNED else median
            reach = (size - one.limit) / max(one.limit, floor_of(one.quantity, loop, steps))
            found.append(Distance(reach, one.limit, "limit", one.quantity))
    return sorted(found, key=lambda distance: -distance.value)


def from_baseline(trend: Trend, loop: Loop, steps: Sequence[PastStep]) -> list[Distance]:
    """Distance of each quantity that got worse from what it used to be, farthest first."""
    found = []
    for one in trend.quantities.values():
        was, now = one.was, one.now
        if one.changed and now is not None and was is not None:
            reach = (now - was) / max(was, floor_of(one.quantity, loop, steps))
            found.append(Distance(reach, was, "baseline", one.quantity))
    return sorted(found, key=lambda distance: -distance.value)


def floor_of(quantity: Quantity, loop: Loop, steps: Sequence[PastStep]) -> float:
    """The least a distance is taken relative to, in the quantity's unit."""
    if quantity is Quantity.OVERSHOOT:
        return OVERSHOOT_FLOOR_PCT
    if quantity is Quantity.DECAY_RATIO:
        return DECAY_FLOOR
    if quantity not in (*SIGNED, Quantity.UNREST):
        return TIME_FLOOR_S
    if loop.span_eu:
        return ERROR_FLOOR_OF_RANGE * abs(loop.span_eu)
    sizes = [abs(step.sp_to - step.sp_from) for step in steps]
    return ERROR_FLOOR_OF_CHANGE * statistics.median(sizes) if sizes else 1.0


def place(standing: Standing) -> tuple[int, float, str]:
    """Sort key of the list: group, then what orders it, most urgent first, then tag."""
    group = list(Group).index(standing.group)
    value = standing.order_value
    return group, -(float(standing.criticality) if value is None else value), standing.tag
