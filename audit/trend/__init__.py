"""A loop's measured history in; for each quantity whether it got worse than it used to be, out.

Pure: the whole history is gone through anew each night, and the same steps give the same answer.
The limits of a spec play no part, so that a changed limit is no change of the loop.
"""

from __future__ import annotations

import statistics
from collections.abc import Collection, Sequence

import numpy as np
from numpy.typing import NDArray

from audit.evidence import PEAK_BOUND, MedianLevel, median_of
from audit.records import Loop, PastStep, Quantity, QuantityTrend, Reason, Trend
from audit.trend.baseline import EACH_WAY, PROVISIONAL, first_baseline
from audit.trend.cusum import RECENT, Watch, watch
from audit.trend.date import change_point
from audit.trend.series import LOOKED_AT, Series, least_of, scale_of, series_of

GROSS = 2.0
"""Against a provisional baseline a worsening must be so many times what else matters."""
DATED_WITH = 10
"""Steps from the alarm on that the date of a change rests on; later ones do not move it."""
OTHER_LEVEL = 0.25
"""Share of the range by which two operating levels differ enough to be named."""
OTHER_SIZE = 2.0
FIVE_PCT = 5.0


def assess(steps: Sequence[PastStep], loop: Loop, limited: Collection[Quantity]) -> Trend:
    """Each quantity of a loop against its own baseline, as of the newest of ``steps``.

    The first usable steps are the baseline: provisional from 10, grown to 30 while nothing
    changes. There is none where most of them have only an "at least", or where a peak was seldom
    seen. After a loop was put right the same baseline holds: the flag goes when the last 10 steps
    are back at it, and a loop that became better than it was is still held against its first level.
    "Beyond chance" is a one-sided cumulative sum (Page 1954) on the scores against it,
    k = 0.5 plus 1.645 standard errors of the baseline's median, h = 10 (15 while provisional).
    In 1000 simulated years of one quantity that does not change, with 4 steps a day, the baseline
    estimated and a scatter of 5 to 30 %, there were 0 to 14 false alarms, at most 8 years with one:
    about 0.1 a loop and year at worst over all eight quantities, before "large enough" is asked.
    Steps are taken as independent.

    "Large enough" is a median of the last 10 steps (of those since the change, if fewer) that is
    worse by 20 % of a time, 5 points of overshoot, 0.15 of decay ratio, 0.5 % of range of error
    (5 % of the size of the changes without a range), or three times the unrest (common practice,
    no source); twice that while provisional.

    Quantities without a limit are looked at too; those in ``limited`` come first. Of an averaging
    level only the error is looked at.
    """
    usable = sorted((step for step in steps if step.usable), key=lambda step: step.at_us)
    found = {}
    for quantity in sorted(_looked_at(loop, usable), key=lambda one: one not in limited):
        series = series_of(usable, quantity, least_of(quantity, loop))
        if len(series):
            found[quantity] = _trend(quantity, series, usable, loop)
    return Trend(found)


def _looked_at(loop: Loop, usable: Sequence[PastStep]) -> Sequence[Quantity]:
    """Without the settling time in ± 5 % where that is the spec's band: it would come twice."""
    if loop.averaging:
        return (Quantity.STEADY_STATE_ERROR,)
    if usable and usable[-1].band_pct == FIVE_PCT:
        return [quantity for quantity in LOOKED_AT if quantity is not Quantity.SETTLING_TIME_5PCT]
    return LOOKED_AT


def _trend(
    quantity: Quantity, series: Series, usable: Sequence[PastStep], loop: Loop
) -> QuantityTrend:
    first = first_baseline(series)
    if first is None or _seldom_peaks(quantity, usable, series.steps[first - 1].at_us, first):
        return _no_baseline(quantity, series)
    scale = scale_of(quantity, loop, series.steps)
    state = watch(series, scale, first)
    chosen = state.recent(len(series))
    baseline = _median(series, state.baseline.taken)
    recent = _median(series, chosen)
    excess = state.recent_excess(len(series))
    needed = scale.matters * (GROSS if state.provisional else 1.0)
    since, since_low, since_high = _date(state)
    return QuantityTrend(
        quantity,
        baseline.value,
        baseline.low,
        baseline.high,
        len(state.baseline.taken),
        state.provisional,
        recent.value,
        recent.low,
        recent.high,
        beyond_chance=state.alarm is not None,
        large_enough=excess is not None and excess >= needed,
        since_us=since,
        since_low_us=since_low,
        since_high_us=since_high,
        note=_note(state, chosen, loop, recent),
        recent_steps=recent.count,
    )


def _seldom_peaks(
    quantity: Quantity, usable: Sequence[PastStep], until_us: int, known: int
) -> bool:
    """Whether most of the first steps had no peak: the few that had are not what is normal."""
    if quantity not in PEAK_BOUND:
        return False
    first = (step.measured.get(quantity) for step in usable if step.at_us <= until_us)
    return sum(one is not None and one.why is Reason.NO_PEAK for one in first) > known


def _no_baseline(quantity: Quantity, series: Series) -> QuantityTrend:
    recent = _median(series, range(len(series))[-RECENT:])
    count = len(series)
    if count < PROVISIONAL:
        note = f"a baseline needs {PROVISIONAL} usable changes, there are {count}"
    elif quantity in PEAK_BOUND and first_baseline(series) is not None:
        note = "most of the first changes had no peak"
    else:
        note = 'most of the first changes have only an "at least"'
    return QuantityTrend(
        quantity,
        None,
        None,
        None,
        count if count < PROVISIONAL else 0,
        True,
        None if recent.longer_than else recent.value,
        recent.low,
        recent.high,
        beyond_chance=False,
        large_enough=False,
        note=note,
        recent_steps=recent.count,
    )


def _median(series: Series, chosen: Sequence[int] | NDArray[np.int64]) -> MedianLevel:
    level = median_of([series.measured[int(index)] for index in chosen])
    return level or MedianLevel(None, None, None, 0)


def _date(state: Watch) -> tuple[int | None, int | None, int | None]:
    """Stamp of the first step of the change and its range: the estimate by likelihood, widened by
    the start of the run of the cumulative sum, and back to the last step before.
    """
    if state.alarm is None:
        return None, None, None
    end = min(len(state.series), state.alarm + DATED_WITH)
    part = slice(state.from_index, end)
    told = np.flatnonzero(state.baseline.tells(state.series, part))
    scores = state.baseline.scores(state.series, part)[told]
    first, low, high = (state.from_index + int(told[at]) for at in change_point(scores))
    before = max(min(low, state.onset) - 1, 0)
    stamps = [state.series.steps[index].at_us for index in (first, before, high)]
    return stamps[0], stamps[1], stamps[2]


def _note(state: Watch, chosen: NDArray[np.int64], loop: Loop, recent: MedianLevel) -> str:
    """What the comparison could not do, in words."""
    notes = []
    if recent.longer_than:
        notes.append("the recent level is at least that")
    then = [state.series.steps[index] for index in state.baseline.taken]
    now = [state.series.steps[int(index)] for index in chosen]
    if now and not state.baseline.by_direction:
        notes += _other_direction(then, now)
    if now:
        notes += _other_level(then, now, loop) + _other_size(then, now)
    return "; ".join(notes)


def _other_direction(then: Sequence[PastStep], now: Sequence[PastStep]) -> list[str]:
    ways = {step.sp_to >= step.sp_from for step in now}
    if len(ways) > 1:
        return []
    up = ways.pop()
    same = sum((step.sp_to >= step.sp_from) is up for step in then)
    if same >= EACH_WAY:
        return []
    word = "up" if up else "down"
    return [f"the last {len(now)} steps all went {word}, only {same} of the baseline's did"]


def _other_level(then: Sequence[PastStep], now: Sequence[PastStep], loop: Loop) -> list[str]:
    was = statistics.median(step.sp_to for step in then)
    is_now = statistics.median(step.sp_to for step in now)
    if loop.span_eu is None or abs(is_now - was) <= OTHER_LEVEL * abs(loop.span_eu):
        return []
    eu = f" {loop.eu}" if loop.eu else ""
    return [
        f"compared across operating levels: setpoint now about {is_now:.4g}{eu}, "
        f"in the baseline about {was:.4g}{eu}"
    ]


def _other_size(then: Sequence[PastStep], now: Sequence[PastStep]) -> list[str]:
    was = statistics.median(abs(step.sp_to - step.sp_from) for step in then)
    is_now = statistics.median(abs(step.sp_to - step.sp_from) for step in now)
    if min(was, is_now) * OTHER_SIZE > max(was, is_now):
        return []
    return [f"compared across sizes: changes now {is_now:.3g}, in the baseline {was:.3g}"]
