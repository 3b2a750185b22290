"""The share of loops with data: on the last day against the days before it.

In: ``Facts``. Out: a sentence where it fell.
"""

from __future__ import annotations

from datetime import date, timedelta
from statistics import median

from audit import figures
from audit.feed.facts import Facts, listed
from audit.records import DayRecord

DAYS_BEFORE = 14
FEWEST_DAYS = 3
"""Days with any data, of the days before, that are needed to tell what is usual …"""
LEAST_FALL = 0.10
LEAST_LOOPS = 3
"""… and a fall by more than this share and by no fewer loops is said (common practice, no
source)."""


def falling(facts: Facts) -> list[str]:
    """A sentence where far fewer loops than usual have a good process variable."""
    last = facts.night - timedelta(days=1)
    with_data = {
        last - timedelta(days=back): _with_data(facts, last - timedelta(days=back))
        for back in range(DAYS_BEFORE + 1)
    }
    now, before = with_data.pop(last), [found for found in with_data.values() if found]
    if len(before) < FEWEST_DAYS:
        return []
    usual = median(len(found) for found in before)
    fall = usual - len(now)
    if fall < LEAST_LOOPS or fall <= LEAST_FALL * len(facts.loops):
        return []
    often = [
        loop.tag
        for loop in facts.loops
        if loop.tag not in now and 2 * sum(loop.tag in found for found in before) >= len(before)
    ]
    count, named = len(facts.loops), f" Without: {listed(often)}." if often else ""
    return [
        f"Fewer loops with data: {len(now)} of {count} ({figures.percent(len(now) / count)}) had a "
        f"good process variable on {last}, where {usual:g} ({figures.percent(usual / count)}) is "
        f"the median of the {DAYS_BEFORE} days before.{named}"
    ]


def _with_data(facts: Facts, day: date) -> set[str]:
    return {
        loop.tag
        for loop in facts.loops
        if any(_has_data(one) for one in facts.days.get(loop.tag, ()) if one.day == day)
    }


def _has_data(day: DayRecord) -> bool:
    return day.pv_bad_us < day.span_us


def empty(facts: Facts, days: int) -> list[str]:
    """Loops without a good process variable through the last days up to the night."""
    first = facts.night - timedelta(days=days)
    return [
        loop.tag
        for loop in facts.loops
        if not any(
            _has_data(day)
            for day in facts.days.get(loop.tag, ())
            if first <= day.day <= facts.night
        )
    ]
