"""The setpoint changes seen in the period in; what their kinds and counts say of the loop, out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

from audit.ranking.limits import UNANSWERED, UNANSWERED_OF, Evidence, has, unanswered
from audit.ranking.sentences import counted, plural, share
from audit.records import ListReason, PastStep, Reason

OFTEN = 3
OFTEN_SHARE = 1 / 3
"""So many steps, and such a share of those seen, are "often" (common practice, no source)."""
FEW_SEEN = 6
FEW_SHARE = 0.5
FALLEN_BY = 0.3
EARLIER_SEEN = 10
"""A share of usable steps that fell by so much, with so many steps before, is a reason to look."""


def none_usable(seen: Sequence[PastStep], days: int) -> ListReason:
    """What was seen of a loop without a usable step, and what was wrong with it."""
    over = f"in the last {plural(days, 'day')}"
    if not seen:
        return ListReason("no_usable_step", f"No setpoint change seen {over}.")
    text = f"{plural(len(seen), 'setpoint change')} seen {over}, none usable{_whys(seen)}."
    return ListReason("no_usable_step", text)


def unanswered_sentence(evidence: Evidence) -> str:
    of = min(len(evidence.usable), UNANSWERED_OF)
    return (
        f"Did not answer {evidence.unanswered} of the last {plural(of, 'usable setpoint change')}: "
        "the process variable moved by less than 20 % of the change, or by no more than its own "
        "uncertainty."
    )


def seen_reasons(evidence: Evidence) -> list[ListReason]:
    """What happened to many of the steps seen, usable or not."""
    return [
        *_unanswered(evidence),
        *_often(evidence.seen, Reason.OSCILLATING, "oscillated before and after"),
        *_often(evidence.seen, Reason.CUT_SHORT, "were cut short by the next move"),
        *_few_usable(evidence),
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


def _few_usable(evidence: Evidence) -> list[ListReason]:
    seen, usable, earlier = evidence.seen, evidence.usable, evidence.earlier
    if not usable or len(seen) < FEW_SEEN:
        return []
    now = len(usable) / len(seen)
    then = sum(step.usable for step in earlier) / len(earlier) if earlier else 0.0
    fallen = len(earlier) >= EARLIER_SEEN and then - now >= FALLEN_BY
    if now >= FEW_SHARE and not fallen:
        return []
    text = f"Only {len(usable)} of {plural(len(seen), 'setpoint change')} usable{_whys(seen)}"
    if fallen:
        text += f"; before, {share(then, 1.0)} were"
    return [ListReason("few_usable", f"{text}.")]


def _whys(seen: Sequence[PastStep]) -> str:
    """Why steps were set aside, the most frequent first; empty without any."""
    first = Counter(step.set_aside[0] for step in seen if not step.usable and step.set_aside)
    counts = sorted(first.items(), key=lambda item: (-item[1], item[0].value))
    return f": {counted(counts)}" if counts else ""
