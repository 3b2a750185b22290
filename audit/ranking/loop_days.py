"""A loop's last days in; what they say of its mode, output and measurement, out."""

from __future__ import annotations

from collections.abc import Sequence

from audit.ranking.sentences import plural, share
from audit.records import DayRecord, ListReason

LAST_DAYS = 7
PARKED_BELOW = 0.5
SATURATED_FROM = 0.2
PV_BAD_FROM = 0.05
"""Shares of the known time (common practice, no source)."""


def is_parked(days: Sequence[DayRecord]) -> bool:
    """Whether the loop was in an automatic mode for less than half of the last days."""
    last = _last(days)
    known = sum(day.mode_us for day in last)
    return known > 0 and sum(day.auto_us for day in last) < PARKED_BELOW * known


def day_reasons(days: Sequence[DayRecord]) -> list[ListReason]:
    """Parked in manual, output often at its limit, measurement often bad or missing."""
    last = _last(days)
    over = f"of the last {plural(len(last), 'day')} on record"
    reasons = []
    if is_parked(days):
        in_auto = share(sum(d.auto_us for d in last), sum(d.mode_us for d in last))
        text = f"Parked in manual: in automatic {in_auto} {over}{_last_in_auto(days)}."
        reasons.append(ListReason("parked_manual", text))
    output, saturated = sum(d.output_us for d in last), sum(d.saturated_us for d in last)
    if output and saturated >= SATURATED_FROM * output:
        text = f"Controller output at its limit {share(saturated, output)} {over}."
        reasons.append(ListReason("output_saturated_often", text))
    span, bad = sum(d.span_us for d in last), sum(d.pv_bad_us for d in last)
    if span and bad >= PV_BAD_FROM * span:
        text = f"Process variable bad or missing {share(bad, span)} {over}{_last_good(days)}."
        reasons.append(ListReason("pv_bad_often", text))
    return reasons


def _last_in_auto(days: Sequence[DayRecord]) -> str:
    """When a loop that is not in automatic any more was; empty where it still is at times."""
    if any(day.auto_us for day in _last(days)):
        return ""
    auto = [day.day for day in days if day.auto_us]
    return f", last on {max(auto)}" if auto else f", and not once in {len(days)} days"


def _last_good(days: Sequence[DayRecord]) -> str:
    """When a process variable that is bad all the time was good; empty where it still is."""
    if any(day.pv_bad_us < day.span_us for day in _last(days)):
        return ""
    good = [day.day for day in days if day.pv_bad_us < day.span_us]
    return f", last good on {max(good)}" if good else f", and not once good in {len(days)} days"


def _last(days: Sequence[DayRecord]) -> list[DayRecord]:
    return sorted(days, key=lambda day: day.day)[-LAST_DAYS:]
