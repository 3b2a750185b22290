"""The good samples of a setpoint come in, its moves go out: changes of what it holds, not noise.

Most setpoints are numbers the control system holds: every stored change of value is a move. A
setpoint that is measured or transmitted jitters about what it holds: there a move is a change of
level beyond the jitter. Which of the two holds is judged at each sample from its neighbourhood
alone, the ``before`` in front of it and the ``join`` behind it, so that a move never depends on
samples farther away.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from audit.records import Samples, Windows

Indices = NDArray[np.int64]
Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

NEIGHBOURS = 64
"""At most so many samples on either side are looked at."""
LEVEL_SAMPLES = 7
"""Samples of the median that is the level held before, or after, a jittering setpoint's move."""
LEAST_LEVEL_SAMPLES = 3
JITTER_CHANGES = 10
"""Fewer changes of value than this nearby are moves of a hand or a program, not jitter."""
JITTER_TURNS = 0.2
"""Of independent noise 2 in 3 changes turn back (turning point test), of a moving setpoint few."""
BEYOND_NOISE = 5.0
"""A move of a jittering setpoint is a change of level by more than so many standard deviations."""
SAME = 2e-7
"""Values that differ by no more than this part of themselves may be one number, stored in single
and in double precision."""
MEDIAN_DIFFERENCE = 0.6745 * 2**0.5
"""Median size of the difference of two independent normal values, in standard deviations."""


@dataclass(frozen=True, eq=False)
class Moves:
    """Indices of the moves among the good setpoint samples [k], and the noise there [k], in eu."""

    at: Indices
    noise_eu: Floats


class _Nearby(NamedTuple):
    """Neighbourhood of candidates ``at`` [k]: samples first <= i < at and at <= i < stop."""

    first: Indices
    at: Indices
    stop: Indices

    def only(self, wanted: Flags) -> _Nearby:
        return _Nearby(self.first[wanted], self.at[wanted], self.stop[wanted])


def differ(a: Floats, b: Floats) -> Flags:
    """Which of the pairs [n] are different numbers."""
    return np.asarray(np.abs(a - b) > SAME * np.maximum(np.abs(a), np.abs(b)))


def changed(value: Floats) -> Flags:
    """Which samples [n] differ from the one before; the first does not."""
    return np.concatenate(([False], differ(value[1:], value[:-1])))[: len(value)]


def moves_of(sp: Samples, windows: Windows) -> Moves:
    """The moves of a setpoint given by its good samples alone."""
    differs = changed(sp.value)
    steady = differs & ~_spikes(sp, differs, windows)
    near = _nearby(sp.t_us, np.flatnonzero(differs), windows)
    jitter = _jitters(sp.value, differs, near)
    held = near.at[~jitter & steady[near.at]]
    noisy, noise_eu = _level_moves(sp.value, differs, near.only(jitter))
    at = np.concatenate((held, noisy))
    noise = np.concatenate((np.zeros(len(held)), noise_eu))
    order = np.argsort(at)
    return Moves(at[order], noise[order])


def _nearby(t_us: NDArray[np.int64], at: Indices, windows: Windows) -> _Nearby:
    first = np.searchsorted(t_us, t_us[at] - windows.before_us, "left")
    stop = np.searchsorted(t_us, t_us[at] + windows.join_us, "right")
    return _Nearby(np.maximum(first, at - NEIGHBOURS), at, np.minimum(stop, at + NEIGHBOURS))


def _spikes(sp: Samples, differs: Flags, windows: Windows) -> Flags:
    """One odd sample between equal ones of a regular scan: it, and the way back, are no moves."""
    spikes = np.zeros(len(sp), np.bool_)
    if len(sp) < 5:
        return spikes
    odd = differs[2:-2] & differs[3:-1] & ~differs[1:-3] & ~differs[4:]
    odd &= ~differ(sp.value[1:-3], sp.value[3:-1])
    between = np.lib.stride_tricks.sliding_window_view(np.diff(sp.t_us), 4)
    odd &= between.max(axis=1) <= 2 * between.min(axis=1)
    odd &= sp.t_us[4:] - sp.t_us[:-4] <= min(windows.join_us, windows.before_us)
    at = np.flatnonzero(odd) + 2
    spikes[at] = True
    spikes[at + 1] = True
    return spikes


def _jitters(value: Floats, differs: Flags, near: _Nearby) -> Flags:
    """Where [k] the setpoint jitters: many changes of value nearby, and many that turn back."""
    count = np.cumsum(differs)
    rises = value[differs] > value[np.flatnonzero(differs) - 1]
    turned = np.concatenate(([False], rises[1:] != rises[:-1]))[: len(rises)]
    turns = np.concatenate(([0], np.cumsum(turned)))

    def within(start: Indices, stop: Indices) -> tuple[Indices, Indices]:
        """Changes, and turns between them, of samples start < i < stop."""
        low, high = count[start], count[np.maximum(stop - 1, start)]
        return high - low, turns[high] - turns[np.minimum(low + 1, high)]

    changes_before, turns_before = within(near.first, near.at)
    changes_after, turns_after = within(near.at, near.stop)
    changes = changes_before + changes_after
    pairs = np.maximum(changes_before - 1, 0) + np.maximum(changes_after - 1, 0)
    often = turns_before + turns_after >= JITTER_TURNS * pairs
    return np.asarray((changes >= JITTER_CHANGES) & often)


def _level_moves(value: Floats, differs: Flags, near: _Nearby) -> tuple[Indices, Floats]:
    """Moves of a jittering setpoint among the candidates, and the noise at each.

    The sample before a move lies nearer to the level before, the sample at it nearer to the level
    after, and the two levels differ by more than the noise.
    """
    enough = np.minimum(near.at - near.first, near.stop - near.at) >= LEAST_LEVEL_SAMPLES
    near = near.only(enough)
    before = row_medians(value, np.maximum(near.first, near.at - LEVEL_SAMPLES), near.at)
    after = row_medians(value, near.at, np.minimum(near.stop, near.at + LEVEL_SAMPLES))
    here, last = value[near.at], value[near.at - 1]
    crossing = np.abs(here - after) < np.abs(here - before)
    crossing &= np.abs(last - before) <= np.abs(last - after)
    close = _noise_eu(value, differs, near.only(crossing), LEVEL_SAMPLES)
    size = np.abs(after - before)
    crossing[crossing] = size[crossing] > close
    near, size = near.only(crossing), size[crossing]
    noise = _noise_eu(value, differs, near, NEIGHBOURS)
    beyond = size > BEYOND_NOISE * noise
    return near.at[beyond], noise[beyond]


def _noise_eu(value: Floats, differs: Flags, near: _Nearby, reach: int) -> Floats:
    """Standard deviation of the jitter around each candidate [k], from the median difference.

    Differences of zero (a quantised value that stayed) and the candidate's own are left out; where
    no difference is left there is no jitter: 0.
    """
    sizes = np.where(differs, np.abs(np.diff(value, prepend=value[:1])), np.inf)
    first = np.maximum(near.first, near.at - reach) + 1
    before = _rows(sizes, first, near.at)
    after = _rows(sizes, near.at + 1, np.minimum(near.stop, near.at + reach))
    return _medians(np.concatenate((before, after), axis=1)) / MEDIAN_DIFFERENCE


def row_medians(value: Floats, first: Indices, stop: Indices) -> Floats:
    """Median of value[first:stop] for each pair; at least one value in each."""
    return _medians(_rows(value, first, stop))


def _rows(value: Floats, first: Indices, stop: Indices) -> Floats:
    """value[first:stop] of each pair as a row, filled up with infinity."""
    width = int(np.max(stop - first, initial=1))
    columns = first[:, None] + np.arange(width)
    inside = columns < stop[:, None]
    return np.where(inside, value[np.where(inside, columns, 0)], np.inf)


def _medians(rows: Floats) -> Floats:
    """Median of the finite values of each row; 0 where there is none."""
    count = np.isfinite(rows).sum(axis=1)
    ordered = np.sort(rows, axis=1)
    each = np.arange(len(rows))
    middle = ordered[each, np.maximum(count - 1, 0) // 2] + ordered[each, count // 2]
    return np.where(count > 0, 0.5 * middle, 0.0)
