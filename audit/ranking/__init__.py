"""A loop's steps, spec, trend and days in; its standing with reasons, and the list in order, out.

The rule stands in the README: over the last usable steps the median of each limited quantity,
with its interval, against the limit; the worst quantity is the loop's standing. There is no single
score: group, criticality and distance are shown each for itself.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import date, tzinfo

from audit.ranking.distance import distance_of, group_of, place
from audit.ranking.limits import evidence_of, limit_standings, standing_word
from audit.ranking.reasons import Case, reasons_of
from audit.records import (
    DayRecord,
    Loop,
    PastStep,
    Spec,
    Standing,
    StandingRule,
    Trend,
    local_day,
)

__all__ = ["order", "stand"]


def stand(
    loop: Loop,
    night: date,
    cutoff_us: int,
    zone: tzinfo,
    steps: Sequence[PastStep],
    spec: Spec | None,
    trend: Trend,
    days: Sequence[DayRecord],
    rule: StandingRule,
    in_register: bool = True,
) -> Standing:
    """One loop's standing on one night.

    ``steps``: all its steps; those whose window ended before ``cutoff_us`` count. ``spec``: the one
    in force at the cut-off. ``trend``: of the same steps. ``days``: its last days' records.
    ``zone``: the site's, for dates. ``in_register`` False: the loop was retired; said so.
    """
    evidence = evidence_of(steps, cutoff_us, rule)
    limits = limit_standings(evidence.chosen, spec, loop)
    word = standing_word(evidence, limits, loop)
    group = group_of(word, trend.degraded)
    distance = distance_of(group, limits, trend, loop, evidence.chosen)
    since = trend.since_us if trend.degraded else None
    case = Case(
        loop=loop,
        word=word,
        group=group,
        evidence=evidence,
        limits=limits,
        spec=spec,
        trend=trend,
        days=tuple(days),
        rule=rule,
        cutoff_us=cutoff_us,
        zone=zone,
        in_register=in_register,
    )
    return Standing(
        tag=loop.tag,
        night=night,
        group=group,
        standing=word,
        degraded=trend.degraded,
        since=None if since is None else local_day(since, zone),
        usable_steps=len(evidence.usable),
        reasons=reasons_of(case),
        limits=limits,
        trend=trend,
        criticality=loop.criticality,
        distance=distance.value if distance else None,
        reference=distance.reference if distance else None,
        reference_kind=distance.kind if distance else None,
        order_quantity=distance.quantity if distance else None,
        order_value=loop.criticality * distance.value if distance else None,
    )


def order(standings: Iterable[Standing]) -> list[Standing]:
    """The ranked list: by group; in the groups out of spec and degrading by criticality times
    distance, in the others by criticality, most critical first; ties by tag.
    """
    return sorted(standings, key=place)
