"""The setpoint changes seen in the period in; what their kinds and counts say of the loop, out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from datetime import tzinfo

from audit.ranking.limits import UNANSWERED, UNANSWERED_OF, Evidence, has, unanswered
from audit.ranking.sentences import counted, plural, share
from audit.records import DAY_US, ListReason, Loop, PastStep, Reason, local_day

OFTEN = 3
OFTEN_SHARE = 1 / 3
"""So many steps, and such a share of those seen, are "often" (common practice, no source)."""
FRESH_DAYS = 7
"""A newest usable step older than this many days is said to be old."""
FEW_SEEN = 6
FEW_SHARE = 0.5
FALLEN_BY = 0.3
EARLIER_SEEN = 10
"""A share of usable steps that fell by so much, with so many steps before, is a reason to look."""


def none_usable(seen: Sequence[PastStep], days: int, loop: Loop) -> ListReason:
    """What was seen of a loop without a usable step, and what was wrong with it."""
    over = f"in the last {plural(days, 'day')}"
    if not seen:
        return ListReason("no_usable_step", f"No setpoint change seen {over}.")
    counts = set_aside_counts(seen)
    if loop.cascade_primary:
        text = (
            f"Its setpoint is moved by its primary {loop.cascade_primary}: of {len(seen)} moves "
            f"{over} none was a single step to measure{_bracketed(counts)}. Judge the primary, or "
            "step this loop on its own setpoint."
        )
        return ListReason("no_usable_step", text)
    what = plural(len(seen), "setpoint change")
    text = f"{what} seen {over}, none usable{f': {counts}' if counts else ''}."
    return ListReason("no_usable_step", text)


def old_evidence(evidence: Evidence, cutoff_us: int, zone: tzinfo) -> list[ListReason]:
    """Said where the newest usable step is older than a week: nothing is known since."""
    if not evidence.chosen:
        return []
    newest_us = evidence.chosen[-1].at_us
    age = (cutoff_us - newest_us) // DAY_US
    if age <= FRESH_DAYS:
        return []
    text = (
        f"The newest usable setpoint change is {age} days old ({local_day(newest_us, zone)}): "
        "how the loop has done since is not known."
    )
    return [ListReason("evidence_old", text)]


def unanswered_sentence(evidence: Evidence) -> str:
    of = min(len(evidence.usable), UNANSWERED_OF)
    return (
        f"Did not answer {evidence.unanswered} of the last {plural(of, 'usable setpoint change')}: "
        "the process variable moved less than 20 % of the way, or within its own uncertainty."
    )


def seen_reasons(evidence: Evidence, loop: Loop) -> list[ListReason]:
    """What happened to many of the steps seen, usable or not."""
    return [
        *_unanswered(evidence),
        *_often(evidence.seen, Reason.OSCILLATING, "oscillated before and after"),
        *_often(
            evidence.seen,
            Reason.CUT_SHORT,
            "were cut short by the next move or the window's end",
        ),
        *_few_usable(evidence, loop),
    ]


def _unanswered(evidence: Evidence) -> list[ListReason]:
    """Fewer than put a loop out of spec by themselves."""
    if not 0 < evidence.unanswered < UNANSWERED:
        return []
    return [ListReason("no_response_seen", unanswered_sentence(evidence))]


def _often(seen: Sequence[PastStep], why: Reason, what: str) -> list[ListReason]:
    count = sum(has(step, why) and not unanswered(step) for step in seen)
    if count < OFTEN or count < OFTEN_SHARE * len(seen):
        return []
    text = f"{count} of {plural(len(seen), 'setpoint change')} {what}."
    return [ListReason(f"{why.value}_often", text)]


def _few_usable(evidence: Evidence, loop: Loop) -> list[ListReason]:
    seen, usable, earlier = evidence.seen, evidence.usable, evidence.earlier
    if not usable or len(seen) < FEW_SEEN:
        return []
    now = len(usable) / len(seen)
    then = sum(step.usable for step in earlier) / len(earlier) if earlier else 0.0
    fallen = len(earlier) >= EARLIER_SEEN and then - now >= FALLEN_BY
    if now >= FEW_SHARE and not fallen:
        return []
    text = f"Only {len(usable)} of {plural(len(seen), 'setpoint change')} usable"
    if loop.cascade_primary:
        text += f", for its primary {loop.cascade_primary} moves the setpoint"
    counts = set_aside_counts(seen)
    text += f": {counts}" if counts else ""
    if fallen:
        text += f"; before, {share(then, 1.0)} were"
    return [ListReason("few_usable", f"{text}.")]


def set_aside_counts(seen: Sequence[PastStep]) -> str:
    """Why steps were set aside, the most frequent first; empty without any."""
    first = Counter(step.set_aside[0] for step in seen if not step.usable and step.set_aside)
    return counted(sorted(first.items(), key=lambda item: (-item[1], item[0].value)))


def _bracketed(text: str) -> str:
    return f" ({text})" if text else ""
