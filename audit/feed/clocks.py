"""Clocks that differ: outputs that react before the setpoint they answer.

In: ``Facts``. Out: a sentence. One early reaction may be chance; several by the same time are a
clock's.
"""

from __future__ import annotations

from collections.abc import Sequence
from statistics import median

from audit import figures
from audit.feed.facts import Facts, counted, listed
from audit.records import Measured

CHANGES = 10
"""A loop's newest changes that are looked at …"""
LEAST_EARLY = 5
"""… and how many of them must have come early by the same time …"""
ALIKE = 0.1
"""… to within this share of it beyond their own intervals (common practice, no source)."""


def differing(facts: Facts) -> list[str]:
    """A sentence on the loops whose output is stamped before the setpoint it answers.

    Not on inner loops: their setpoints move all the time, and no movement answers just one.
    """
    found = {
        loop.tag: _early(facts.reactions.get(loop.tag, ()))
        for loop in facts.loops
        if loop.cascade_primary is None
    }
    texts = [f"{tag} by {_amount(early)}" for tag, early in found.items() if early]
    if not texts:
        return []
    return [
        f"The clocks of setpoint and controller output differ in {counted(texts)}, the output is "
        f"stamped before the setpoint it answers: {listed(texts)}. If it is the setpoint's that is "
        "wrong, the times counted from it are off by as much; have both sources' clocks checked."
    ]


def _early(reactions: Sequence[Measured]) -> list[Measured]:
    """The newest reactions that came early by the same time; none where they are too few.

    Early: all of the interval lies before the setpoint change, which is more than one sample
    interval of the setpoint.
    """
    told = [one for one in reactions if one.value is not None][-CHANGES:]
    early = [one for one in told if one.high is not None and one.high < 0.0]
    if len(early) < LEAST_EARLY:
        return []
    middle = median(_value(one) for one in early)
    alike = [one for one in early if _holds(one, middle)]
    return alike if len(alike) >= LEAST_EARLY else []


def _value(one: Measured) -> float:
    return one.value or 0.0


def _holds(one: Measured, time_s: float) -> bool:
    slack = ALIKE * abs(time_s)
    low = _value(one) if one.low is None else one.low
    high = _value(one) if one.high is None else one.high
    return low - slack <= time_s <= high + slack


def _amount(early: Sequence[Measured]) -> str:
    by = median(-_value(one) for one in early)
    least = median(-(one.high or 0.0) for one in early)
    most = median(-(_value(one) if one.low is None else one.low) for one in early)
    size = figures.interval(by, least, most, "s")
    return f"about {size}, in {len(early)} changes"
