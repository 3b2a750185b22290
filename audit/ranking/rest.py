"""A loop's usable steps in; whether its process variable comes to rest less well than it did, out.

The measure is the uncertainty of the level a change ends at (half the interval of the steady-state
error): noise and sustained oscillation both go into it, whatever the size of the changes, and a
loop that oscillates can hide its own slower response behind it.
"""

from __future__ import annotations

import statistics
from collections.abc import Iterable, Sequence

from audit import figures
from audit.ranking.limits import Evidence
from audit.ranking.sentences import unit_of
from audit.records import ListReason, Loop, PastStep, Quantity

FIRST = 30
FEWEST_THEN, FEWEST_NOW = 10, 6
RESTLESS_FROM = 3.0
"""So many times the uncertainty it used to have (common practice, no source)."""


def restless(evidence: Evidence, loop: Loop) -> list[ListReason]:
    """Whether the newest usable steps end far less certainly than the loop's first ones did."""
    usable = [step for step in (*evidence.earlier, *evidence.seen) if step.usable]
    then = _uncertainty(usable[: min(FIRST, len(usable) - len(evidence.chosen))], FEWEST_THEN)
    now = _uncertainty(evidence.chosen, FEWEST_NOW)
    if then is None or now is None or now < RESTLESS_FROM * then:
        return []
    unit = unit_of(Quantity.STEADY_STATE_ERROR, loop)
    text = (
        "The process variable does not come to rest as it used to: the level it ends at is known "
        f"to ± {figures.with_unit(_short(now), unit)}, at first to "
        f"± {figures.with_unit(_short(then), unit)}. More noise, or an oscillation such as a "
        "sticking valve keeps up."
    )
    return [ListReason("restless", text)]


def _uncertainty(steps: Sequence[PastStep], fewest: int) -> float | None:
    """Median half width of the interval of the level at the end, EU; None of too few."""
    halves = list(_halves(steps))
    return statistics.median(halves) if len(halves) >= fewest else None


def _halves(steps: Sequence[PastStep]) -> Iterable[float]:
    for step in steps:
        error = step.measured.get(Quantity.STEADY_STATE_ERROR)
        if error is not None and error.low is not None and error.high is not None:
            yield (error.high - error.low) / 2.0


def _short(half: float) -> str:
    return figures.plain(float(f"{half:.2g}"))
