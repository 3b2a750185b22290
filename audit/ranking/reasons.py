"""All that is known of one loop's standing in; its reasons, the most important one first, out."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from datetime import tzinfo

from audit.evidence import FEWEST_FOR_ORDER, SIGNED, decide
from audit.ranking.distance import from_baseline, from_limits
from audit.ranking.limits import Evidence, does_not_answer, measured_in
from audit.ranking.loop_days import day_reasons, is_parked
from audit.ranking.seen import none_usable, old_evidence, seen_reasons, unanswered_sentence
from audit.ranking.sentences import (
    REMEDY,
    SEEN_AS,
    STEM,
    change_sentence,
    last_steps,
    limit_sentence,
    name_of,
    plural,
    rests_on,
    times_the_limit,
)
from audit.records import (
    TIMES,
    DayRecord,
    Group,
    LimitStanding,
    ListReason,
    Loop,
    Outcome,
    Quantity,
    Reason,
    Spec,
    StandingRule,
    StandingWord,
    Trend,
)


@dataclass(frozen=True)
class Case:
    """One loop on one night: all its reasons are made of."""

    loop: Loop
    word: StandingWord
    group: Group
    evidence: Evidence
    limits: tuple[LimitStanding, ...]
    spec: Spec | None
    trend: Trend
    days: tuple[DayRecord, ...]
    rule: StandingRule
    cutoff_us: int
    zone: tzinfo
    in_register: bool

    @property
    def band_pct(self) -> float | None:
        if self.spec is not None:
            return self.spec.settling_band_pct
        return self.evidence.chosen[-1].band_pct if self.evidence.chosen else None


def reasons_of(case: Case) -> tuple[ListReason, ...]:
    """The reasons in the order of the loop's group: what put it there comes first."""
    out = _unanswered(case) + _out(case)
    changed = _changed(case)
    unseen = _unseen(case)
    first = changed + out if case.group is Group.DEGRADING else out + changed
    parked = day_reasons(case.days)
    old = old_evidence(case.evidence, case.cutoff_us, case.zone)
    sides = seen_reasons(case.evidence, case.loop)
    sides = old + sides + _baseline(case)
    if not case.in_register:
        sides.insert(0, ListReason("not_in_register", "Not in the loop register any more."))
    if case.word is StandingWord.UNSEEN and is_parked(case.days):
        return tuple(first + parked + unseen + _in_spec(case) + sides)
    return tuple(first + unseen + _undecided(case) + _in_spec(case) + parked + sides)


def _unanswered(case: Case) -> list[ListReason]:
    if not does_not_answer(case.evidence, case.loop):
        return []
    return [ListReason("no_response", unanswered_sentence(case.evidence))]


def _out(case: Case) -> list[ListReason]:
    """Quantities out of spec, farthest from the limit first."""
    by_quantity = {one.quantity: one for one in case.limits}
    reasons = []
    for distance in from_limits(case.limits, case.loop, case.evidence.chosen):
        if distance.quantity is not None:
            one = by_quantity[distance.quantity]
            text = _limit_sentence(one, case) + times_the_limit(one) + _rests_on(one, case)
            reasons.append(ListReason(f"{STEM[one.quantity]}_out", f"{text}."))
    return reasons


def _limit_sentence(one: LimitStanding, case: Case) -> str:
    return limit_sentence(one, case.loop, case.band_pct)


def _rests_on(one: LimitStanding, case: Case) -> str:
    return rests_on(one, len(case.evidence.chosen))


def _changed(case: Case) -> list[ListReason]:
    """Quantities that got worse, those with a limit first, then by how much."""
    limited = {one.quantity for one in case.limits}
    found = [
        distance.quantity
        for distance in from_baseline(case.trend, case.loop, case.evidence.chosen)
        if distance.quantity is not None
    ]
    reasons = []
    for quantity in sorted(found, key=lambda quantity: quantity not in limited):
        one = case.trend.quantities[quantity]
        text = change_sentence(one, case.loop, case.zone, case.band_pct, quantity in limited)
        kind = "slower" if quantity in TIMES else "larger"
        reasons.append(ListReason(f"{STEM[quantity]}_{kind}", text))
    return reasons


def _unseen(case: Case) -> list[ListReason]:
    """Why there is no usable step: what was seen, and what was wrong with it."""
    if case.word is not StandingWord.UNSEEN:
        return []
    reasons = [none_usable(case.evidence.seen, case.rule.days, case.loop)]
    return reasons if case.limits else [*reasons, _no_limits()]


def _undecided(case: Case) -> list[ListReason]:
    """Which quantities the data cannot tell, and what would decide them."""
    if case.word is StandingWord.UNSEEN:
        return []
    judged = [o for o in case.limits if not case.loop.averaging or o.quantity in SIGNED]
    if not case.limits:
        return [_no_limits()]
    if not judged:
        text = "An averaging level is meant to float: only a limit on its error would be judged."
        return [ListReason("averaging", text)]
    return [
        _undecided_reason(one, case)
        for one in judged
        if one.outcome in (Outcome.UNDECIDED, Outcome.NOT_MEASURED)
    ]


def _undecided_reason(one: LimitStanding, case: Case) -> ListReason:
    text = f"{_limit_sentence(one, case)}: undecided, {_decider(one, case)}{_rests_on(one, case)}."
    return ListReason(f"{STEM[one.quantity]}_undecided", text)


def _decider(one: LimitStanding, case: Case) -> str:
    """What would decide a quantity."""
    if not one.steps:
        return _missing(one.quantity, case)
    if one.steps < FEWEST_FOR_ORDER:
        needed = FEWEST_FOR_ORDER - one.steps
        return f"needs about {plural(needed, 'more usable change')}"
    if one.high is None or one.longer_than:
        return _bounded(one.quantity, case)
    if one.median is None:
        return "only an upper bound is known: larger changes or less noise would decide"
    more = case.rule.steps - one.steps
    spans = "the interval still spans the limit"
    if _each_spans(one, case):
        return (
            f"{spans}, and so does that of most changes: larger changes or less noise would decide"
        )
    if more > 0:
        return f"{spans}: needs about {plural(more, 'more usable change')}"
    return f"{spans}: the changes lie on both sides of it"


def _bounded(quantity: Quantity, case: Case) -> str:
    """Why of some responses only "longer than" is known, and what would help."""
    found = (step.measured.get(quantity) for step in case.evidence.chosen)
    whys = Counter(m.why for m in found if m and m.why and m.value is None and m.high is None)
    why = _commonest(whys)
    cut = "some responses were not over when "
    if why is Reason.NO_RESPONSE:
        return f"to some changes it did not answer: {REMEDY[why]}"
    if why is Reason.NOT_FOLLOWING:
        return f"{cut}the loop left automatic: changes left in automatic for longer would decide"
    return f"{cut}the setpoint was moved again or the window ended: more time would decide"


def _commonest(whys: Counter[Reason]) -> Reason | None:
    return min(whys, key=lambda why: (-whys[why], why.value), default=None)


def _each_spans(one: LimitStanding, case: Case) -> bool:
    """Whether most single steps are undecided by their own uncertainty."""
    if case.spec is None:
        return False
    found = [measured_in(step, one.quantity, case.spec) for step in case.evidence.chosen]
    outcomes = [decide(m, one.limit, one.quantity in SIGNED) for m in found if m and m.known]
    return 2 * outcomes.count(Outcome.UNDECIDED) > len(outcomes)


def _missing(quantity: Quantity, case: Case) -> str:
    whys: Counter[Reason] = Counter()
    for step in case.evidence.chosen:
        measured = step.measured.get(quantity)
        if measured is not None and measured.why is not None:
            whys[measured.why] += 1
    chosen = f"none of the {last_steps(len(case.evidence.chosen))} has it"
    why = _commonest(whys)
    if why is None:
        return chosen
    remedy = REMEDY.get(why)
    return f"{chosen} ({whys[why]} {SEEN_AS[why]})" + (f": {remedy}" if remedy else "")


def _in_spec(case: Case) -> list[ListReason]:
    if case.word is not StandingWord.IN_SPEC:
        return []
    met = [_limit_sentence(one, case) for one in case.limits if one.outcome is Outcome.IN_SPEC]
    spared = [
        name_of(one.quantity, case.band_pct)
        for one in case.limits
        if one.outcome is Outcome.NOT_APPLICABLE
    ]
    why = "an averaging level" if case.loop.averaging else "no peak"
    texts = met + [f"{name}: does not apply ({why})" for name in spared]
    over = last_steps(len(case.evidence.chosen))
    medians = f" (medians over the {over}, of those that show it)" if met else ""
    return [ListReason("in_spec", f"{'; '.join(texts)}{medians}.")]


def _baseline(case: Case) -> list[ListReason]:
    """How far the baseline has come, where it is not full."""
    if not case.trend.quantities or case.word is StandingWord.UNSEEN:
        return []
    most = max(case.trend.quantities.values(), key=lambda one: one.baseline_steps)
    if not most.provisional:
        return []
    if most.was is None:
        text = f"No baseline yet: it needs 10 usable changes, there are {most.baseline_steps}."
    else:
        text = (
            f"The baseline is provisional ({plural(most.baseline_steps, 'change')}): "
            "only gross worsening is flagged."
        )
    return [ListReason("provisional_baseline", text)]


def _no_limits() -> ListReason:
    text = "No limit is in force for this loop: set one in the stored specs."
    return ListReason("no_limits", text)
