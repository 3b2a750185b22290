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
    over = f"over the last {plural(len(last), 'day')} on record"
    reasons = []
    if is_parked(days):
        in_auto = share(sum(d.auto_us for d in last), sum(d.mode_us for d in last))
        text = f"Parked in manual: in automatic {in_auto} of the time {over}."
        reasons.append(ListReason("parked_manual", text))
    output, saturated = sum(d.output_us for d in last), sum(d.saturated_us for d in last)
    if output and saturated >= SATURATED_FROM * output:
        text = f"Controller output at its limit {share(saturated, output)} of the time {over}."
        reasons.append(ListReason("output_saturated_often", text))
    span, bad = sum(d.span_us for d in last), sum(d.pv_bad_us for d in last)
    if span and bad >= PV_BAD_FROM * span:
        text = f"Process variable bad or missing {share(bad, span)} of the time {over}."
        reasons.append(ListReason("pv_bad_often", text))
    return reasons


def _last(days: Sequence[DayRecord]) -> list[DayRecord]:
    return sorted(days, key=lambda day: day.day)[-LAST_DAYS:]
