"""A series and its scale in; when it got worse beyond chance, out. Sequential, as of its last step.

A one-sided cumulative sum (Page 1954) of the scores against a baseline that grows while nothing
changes. The same steps always lead to the same state: the history is gone through anew each night.
"""

from __future__ import annotations

import statistics
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from audit.trend.baseline import FULL, PROVISIONAL, Baseline, baseline_of
from audit.trend.series import Scale, Series

RECENT = 10
LIMIT = 10.0
"""Decision limit h of the cumulative sum, standard deviations; see ``assess`` for its rate."""
LIMIT_PROVISIONAL = 15.0
BACK_WITHIN = 0.85
"""Standard deviations above the baseline within which the last RECENT steps are back."""
GROWS_BY = 5
"""The baseline takes in at least so many steps at once, so that it is seldom worked out anew."""
CHUNK = 256


@dataclass
class Watch:
    """State after some steps of a series.

    ``alarm``: index of the step that raised the alarm that still stands; ``onset``: the first of
    the run above zero that led to it; ``from_index``: where that watch began; ``alarms``: index of
    every alarm so far.
    """

    series: Series
    scale: Scale
    baseline: Baseline
    from_index: int = PROVISIONAL
    run_from: int = PROVISIONAL
    alarm: int | None = None
    onset: int = 0
    worse: float = 0.0
    better: float = 0.0
    waiting: list[int] = field(default_factory=list)
    alarms: list[int] = field(default_factory=list)

    @property
    def provisional(self) -> bool:
        return len(self.baseline.taken) < FULL

    def recent(self, upto: int) -> NDArray[np.int64]:
        """The last RECENT telling steps before ``upto``; of an alarm those since its onset."""
        first = max(self.onset if self.alarm is not None else 0, upto - 5 * RECENT)
        told = np.flatnonzero(self.baseline.tells(self.series, slice(first, upto)))
        return told[-RECENT:] + first

    def recent_excess(self, upto: int, fewest: int = 1) -> float | None:
        """Median excess of the recent steps on the scale; None where fewer than so many tell."""
        chosen = self.recent(upto)
        if len(chosen) < fewest:
            return None
        part = slice(int(chosen[0]), upto)
        excess = self.baseline.excess(self.series, part)[chosen - chosen[0]]
        median: float = statistics.median(excess.tolist())
        return median


def watch(series: Series, scale: Scale, first: int = PROVISIONAL) -> Watch:
    """The state after all steps, the first so many of which are the first baseline."""
    state = Watch(series, scale, baseline_of(series, range(first), scale), first, first)
    index = first
    while index < len(series):
        ahead = 4 * GROWS_BY if state.provisional else CHUNK
        index = go_on(state, index, min(index + ahead, len(series)))
    return state


def go_on(state: Watch, first: int, end: int) -> int:
    """Go on from ``first`` until ``end`` or until the baseline changes; the index to go on from."""
    part = slice(first, end)
    told = state.baseline.tells(state.series, part).tolist()
    scores = state.baseline.scores(state.series, part).tolist()
    references = state.baseline.references(state.series, part).tolist()
    provisional = state.provisional
    limit = LIMIT_PROVISIONAL if provisional else LIMIT
    for index in range(first, end):
        at = index - first
        if not told[at]:
            continue
        if state.worse <= 0.0:
            state.run_from = index
        state.worse = max(0.0, state.worse + scores[at] - references[at])
        state.better = max(0.0, state.better - scores[at] - references[at])
        if state.alarm is not None:
            _clear_if_back(state, index)
        elif state.worse > limit:
            _raise(state, index)
        elif provisional and _grow(state, index):
            return index + 1
    return end


def _raise(state: Watch, index: int) -> None:
    state.alarm, state.onset = index, state.run_from
    state.alarms.append(index)
    state.waiting.clear()


def _grow(state: Watch, index: int) -> bool:
    """Let the steps that waited into the baseline once nothing points either way."""
    state.waiting.append(index)
    if len(state.waiting) < GROWS_BY or state.worse > 0.0 or state.better > 0.0:
        return False
    taken = (*state.baseline.taken, *state.waiting)[:FULL]
    state.waiting.clear()
    state.baseline = baseline_of(state.series, taken, state.scale)
    return True


def _clear_if_back(state: Watch, index: int) -> None:
    """End the alarm once the last RECENT steps since its onset are at the baseline again."""
    excess = state.recent_excess(index + 1, fewest=RECENT)
    near = min(state.scale.matters, BACK_WITHIN * state.baseline.scatter)
    if excess is not None and excess < near:
        state.alarm = None
        state.worse = state.better = 0.0
        state.from_index = state.run_from = index + 1
