"""A loop's last usable steps and its limits in; each limited quantity's standing, out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from audit.evidence import PEAK_BOUND, SIGNED, decide, median_of
from audit.records import (
    DAY_US,
    LIMITED,
    LimitStanding,
    Loop,
    Measured,
    Outcome,
    PastStep,
    Quantity,
    Reason,
    Spec,
    StandingRule,
    StandingWord,
)

UNANSWERED = 3
UNANSWERED_OF = 10
"""Three unanswered changes of the last ten usable ones put a loop out of spec."""


@dataclass(frozen=True)
class Evidence:
    """The steps a standing rests on, in time order.

    ``earlier``: before the period; ``seen``: all of the period; ``chosen``: the last usable ones of
    it, by the rule. ``unanswered``: changes of the last ten usable that got no response.
    """

    earlier: tuple[PastStep, ...]
    seen: tuple[PastStep, ...]
    chosen: tuple[PastStep, ...]
    unanswered: int

    @property
    def usable(self) -> tuple[PastStep, ...]:
        return tuple(step for step in self.seen if step.usable)


def evidence_of(steps: Sequence[PastStep], cutoff_us: int, rule: StandingRule) -> Evidence:
    """The steps whose window ended before the cut-off, parted at the start of the period."""
    ended = sorted(
        (step for step in steps if step.window_end_us < cutoff_us), key=lambda step: step.at_us
    )
    first_us = cutoff_us - rule.days * DAY_US
    seen = tuple(step for step in ended if step.at_us >= first_us)
    usable = [step for step in seen if step.usable]
    return Evidence(
        tuple(step for step in ended if step.at_us < first_us),
        seen,
        tuple(usable[-rule.steps :]),
        sum(unanswered(step) for step in usable[-UNANSWERED_OF:]),
    )


def unanswered(step: PastStep) -> bool:
    """Whether the process variable did not answer the change."""
    return has(step, Reason.NO_RESPONSE)


def has(step: PastStep, why: Reason) -> bool:
    """Whether a code stands with the step or with a quantity of it that can be limited."""
    found = (step.measured.get(quantity) for quantity in LIMITED)
    return why in step.set_aside or any(one is not None and one.why is why for one in found)


def limit_standings(
    chosen: Sequence[PastStep], spec: Spec | None, loop: Loop
) -> tuple[LimitStanding, ...]:
    """The standing of each quantity with a limit in force, in the order of LIMITED."""
    if spec is None:
        return ()
    return tuple(
        _limit_standing(chosen, quantity, spec, loop)
        for quantity in LIMITED
        if quantity in spec.limits
    )


def does_not_answer(evidence: Evidence, loop: Loop) -> bool:
    """Out of spec for want of an answer. An averaging level may leave a change unanswered for as
    long as a window: it is not judged so.
    """
    return evidence.unanswered >= UNANSWERED and not loop.averaging


def standing_word(evidence: Evidence, limits: Sequence[LimitStanding], loop: Loop) -> StandingWord:
    """The worst of the limited quantities: out of spec, then undecided, then in spec."""
    if not evidence.chosen:
        return StandingWord.UNSEEN
    outcomes = {one.outcome for one in limits if not loop.averaging or one.quantity in SIGNED}
    if does_not_answer(evidence, loop) or Outcome.OUT_OF_SPEC in outcomes:
        return StandingWord.OUT_OF_SPEC
    if outcomes and outcomes <= {Outcome.IN_SPEC, Outcome.NOT_APPLICABLE}:
        return StandingWord.IN_SPEC
    return StandingWord.UNDECIDED


def measured_in(step: PastStep, quantity: Quantity, spec: Spec) -> Measured | None:
    """What counts of a quantity in a step; a settling time in another band does not."""
    if quantity is Quantity.SETTLING_TIME and step.band_pct != spec.settling_band_pct:
        return None
    return step.measured.get(quantity)


def without_peak(measured: Measured, quantity: Quantity) -> bool:
    return quantity in PEAK_BOUND and not measured.known and measured.why is Reason.NO_PEAK


def _limit_standing(
    chosen: Sequence[PastStep], quantity: Quantity, spec: Spec, loop: Loop
) -> LimitStanding:
    """Median and interval against the limit. A response without a peak counts as met: it takes
    the lowest place, 0; where all are so, the quantity does not apply.
    """
    limit = spec.limits[quantity]
    found = [m for step in chosen if (m := measured_in(step, quantity, spec)) is not None]
    peaks = [without_peak(measured, quantity) for measured in found]
    known = [
        Measured(0.0, 0.0, 0.0) if no_peak else measured
        for measured, no_peak in zip(found, peaks, strict=True)
        if no_peak or measured.known
    ]
    level = median_of(known, quantity in SIGNED)
    if level is None:
        outcome = Outcome.NOT_APPLICABLE if _floats(quantity, loop) else Outcome.NOT_MEASURED
        return LimitStanding(quantity, limit, outcome, None, None, None, 0)
    if sum(peaks) == len(known):
        return LimitStanding(quantity, limit, Outcome.NOT_APPLICABLE, None, None, None, len(known))
    median = Measured(level.value, level.low, level.high, why=Reason.NOISY)
    outcome = decide(median, limit, quantity in SIGNED)
    if _floats(quantity, loop):
        outcome = Outcome.NOT_APPLICABLE
    return LimitStanding(
        quantity,
        limit,
        outcome,
        level.value,
        level.low,
        level.high,
        level.count,
        level.longer_than,
    )


def _floats(quantity: Quantity, loop: Loop) -> bool:
    """Whether a loop is an averaging level that the quantity does not judge."""
    return loop.averaging and quantity not in SIGNED
