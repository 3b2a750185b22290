"""The truth file: what was really done to each loop, for comparison with what the audit says.

In go the cases with their specs and step tests; out goes the content of ``truth.json``, whose keys
the package's docstring lists.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from datetime import UTC, date, datetime, timedelta

from .commissioning import Answer
from .design import QUANTITIES
from .exporting import DEAD_AT_S
from .operators import DAY_S, PARKED_AT_S
from .simulate import Case


def truth_of(
    case: Case,
    spec: Mapping[str, float],
    commissioned: Answer,
    at_full_size: Answer | None,
    first: date,
    days: int,
) -> dict[str, object]:
    """One loop's entry of the truth file; keys as the package's docstring lists them."""
    loop, story = case.loop, case.story
    return {
        "tag": loop.tag,
        "kind": loop.kind,
        "story": "fault" if story.fault else loop.story,
        "fault": _fault(case, first),
        "never_met": story.never_met,
        "parked_in_manual_since": _instant(first, story.parked, PARKED_AT_S),
        "pv_tag_dead_since": _instant(first, story.tag_dead, DEAD_AT_S),
        "moves_cut_short": story.cut_short,
        "moving_setpoint": loop.primary is not None,
        "averaging": loop.averaging,
        "limits": dict(spec),
        "commissioned": _figures(commissioned, loop.span),
        "at_full_size": _figures(at_full_size, loop.span) if at_full_size else None,
        "exceeds": _exceeded(at_full_size or commissioned, spec, loop.span),
        "changes": dict(case.plan.changes),
        "manual_hours": round(_manual_s(case, days) / 3600, 2),
    }


def _fault(case: Case, first: date) -> dict[str, object] | None:
    fault = case.story.fault
    if fault is None:
        return None
    return {
        "cause": fault.cause,
        "shape": "jump" if fault.full == fault.starts else "drift",
        "size": round(fault.size, 4),
        "from": _instant(first, fault.starts),
        "complete": _instant(first, fault.full),
        "put_right": _instant(first, fault.right),
        "remedy": fault.remedy,
        "shows_in": list(QUANTITIES[fault.cause]),
    }


def _instant(first: date, day: int | None, second: int = 0) -> str | None:
    if day is None:
        return None
    midnight = datetime(first.year, first.month, first.day, tzinfo=UTC)
    start = midnight + timedelta(days=day, seconds=second)
    return f"{start:%Y-%m-%dT%H:%M:%SZ}"


def _figures(found: Answer, span: float) -> dict[str, float | None]:
    """An answer in the names and units of the measured quantities."""
    named = asdict(found)
    named["steady_state_error_eu"] = named.pop("steady_state_error") / 100 * span
    return {key: None if value is None else round(value, 4) for key, value in named.items()}


def _exceeded(found: Answer, spec: Mapping[str, float], span: float) -> list[str]:
    """Limited quantities of the undisturbed response that are over their limits, or never end."""
    figures = _figures(found, span)
    over: list[str] = []
    for name, limit in spec.items():
        value = figures[name]
        endless = value is None and name in ("rise_time_s", "settling_time_s")
        if endless or (value is not None and abs(value) > limit):
            over.append(name)
    return over


def _manual_s(case: Case, days: int) -> float:
    """Seconds in manual, from the first of a pair of switches to the second or the end."""
    times, codes, _ = case.plan.columns()
    switches = [float(t) for t, code in zip(times, codes, strict=True) if code != 0]
    if len(switches) % 2:
        switches.append(max(switches[-1], float(days * DAY_S)))
    return sum(off - on for on, off in zip(switches[::2], switches[1::2], strict=True))
