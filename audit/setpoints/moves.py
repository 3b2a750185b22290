"""The good samples of a setpoint come in, its moves go out: changes of what it holds, not noise.

Most setpoints are numbers the control system holds: every stored change of value is a move. A
setpoint that is measured or transmitted jitters about what it holds: there a move is a change of
level beyond the jitter. Which of the two holds is judged at each sample from its neighbourhood
alone, the ``before`` in front of it and the ``join`` behind it, so that a move never depends on
samples farther away.
"""

from __future__ import annotations

from collections.abc import Iterator
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
AT_ONCE = 16_384
"""Changes of value that are looked at together."""
REACH = NEIGHBOURS + 3
"""So far from a change the samples can matter to whether it is a move."""
NARROW = 8
MANY_ROWS = 256
"""So many rows of at most so many values are sorted side by side."""
FOREVER_US = np.iinfo(np.int64).max // 4
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


def changes(value: Floats) -> Indices:
    """Indices [k] of the samples that differ from the one before; the first does not."""
    at = np.flatnonzero(value[1:] != value[:-1]) + 1
    kept = [some[differ(value[some], value[some - 1])] for some in portions(at)]
    return np.concatenate([at[:0], *kept])


def portions(at: Indices) -> Iterator[Indices]:
    """Consecutive parts of some indices, short enough to stay near the processor."""
    for first in range(0, len(at), AT_ONCE):
        yield at[first : first + AT_ONCE]


def moves_of(sp: Samples, changed: Indices, windows: Windows) -> Moves:
    """The moves of a setpoint given by its good samples alone, and by its ``changes``.

    These are gone through in portions, each with its neighbourhood, so that the memory needed does
    not grow with their number.
    """
    found = [Moves(np.empty(0, np.int64), np.empty(0))]
    for at in portions(changed):
        low, high = max(int(at[0]) - REACH, 0), int(at[-1]) + REACH
        start, stop = np.searchsorted(changed, (low + 1, high))
        near = Samples(sp.t_us[low:high], sp.value[low:high], sp.good[low:high])
        some = _portion(near, changed[start:stop] - low, at - low, windows)
        found.append(Moves(some.at + low, some.noise_eu))
    return Moves(
        np.concatenate([some.at for some in found]), np.concatenate([s.noise_eu for s in found])
    )


def _portion(sp: Samples, changed: Indices, at: Indices, windows: Windows) -> Moves:
    """The moves among some of the changes, ``at`` [k]."""
    near = _nearby(sp.t_us, at, windows)
    jitter = _jitters(sp.value, changed, near)
    held = near.at[~jitter]
    held = held[~np.isin(held, _spikes(sp, changed, windows))]
    if not jitter.any():
        return Moves(held, np.zeros(len(held)))
    noisy, noise_eu = _level_moves(sp.value, changed, near.only(jitter))
    moves = np.concatenate((held, noisy))
    noise = np.concatenate((np.zeros(len(held)), noise_eu))
    order = np.argsort(moves)
    return Moves(moves[order], noise[order])


def _nearby(t_us: NDArray[np.int64], at: Indices, windows: Windows) -> _Nearby:
    """At most ``NEIGHBOURS`` samples on either side, and those within ``before`` and ``join``."""
    first = np.maximum(at - NEIGHBOURS, 0)
    far = t_us[at] - t_us[first] > windows.before_us
    first[far] = np.searchsorted(t_us, t_us[at[far]] - windows.before_us, "left")
    stop = np.minimum(at + NEIGHBOURS, len(t_us))
    far = t_us[stop - 1] - t_us[at] > windows.join_us
    stop[far] = np.searchsorted(t_us, t_us[at[far]] + windows.join_us, "right")
    return _Nearby(first, at, stop)


def _spikes(sp: Samples, changed: Indices, windows: Windows) -> Indices:
    """One odd sample between equal ones of a regular scan: it, and the way back, are no moves."""
    far = [-2]  # no change is near enough to be the first's or the last's neighbour
    before = np.concatenate((far, changed))[:-1]
    back, after = np.concatenate((changed, far, far))[1:-1], np.concatenate((changed, far, far))[2:]
    odd = (back == changed + 1) & (before != changed - 1) & (after != changed + 2)
    at = changed[odd & (changed >= 2) & (changed < len(sp) - 2)]
    at = at[~differ(sp.value[at - 1], sp.value[at + 1])]
    between = np.diff(sp.t_us[at[:, None] + np.arange(-2, 3)], axis=1)
    regular = between.max(axis=1, initial=0) <= 2 * between.min(axis=1, initial=FOREVER_US)
    short = sp.t_us[at + 2] - sp.t_us[at - 2] <= min(windows.join_us, windows.before_us)
    at = at[regular & short]
    return np.concatenate((at, at + 1))


def _jitters(value: Floats, changed: Indices, near: _Nearby) -> Flags:
    """Where [k] the setpoint jitters: many changes of value nearby, and many that turn back."""
    rises = value[changed] > value[changed - 1]
    turned = np.concatenate(([False], rises[1:] != rises[:-1]))[: len(rises)]
    turns = np.concatenate(([0], np.cumsum(turned)))

    def within(low: Indices, high: Indices) -> tuple[Indices, Indices]:
        """How many changes low <= k < high, and turns between them."""
        return high - low, turns[high] - turns[np.minimum(low + 1, high)]

    own = np.searchsorted(changed, near.at)
    first = np.searchsorted(changed, near.first, "right")
    changes_before, turns_before = within(np.minimum(first, own), own)
    stop = np.searchsorted(changed, near.stop)
    changes_after, turns_after = within(np.minimum(own + 1, stop), stop)
    count = changes_before + changes_after
    pairs = np.maximum(changes_before - 1, 0) + np.maximum(changes_after - 1, 0)
    often = turns_before + turns_after >= JITTER_TURNS * pairs
    return np.asarray((count >= JITTER_CHANGES) & often)


def _level_moves(value: Floats, changed: Indices, near: _Nearby) -> tuple[Indices, Floats]:
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
    close = _noise_eu(value, changed, near.only(crossing), LEVEL_SAMPLES)
    size = np.abs(after - before)
    crossing[crossing] = size[crossing] > close
    near, size = near.only(crossing), size[crossing]
    noise = _noise_eu(value, changed, near, NEIGHBOURS)
    beyond = size > BEYOND_NOISE * noise
    return near.at[beyond], noise[beyond]


def _noise_eu(value: Floats, changed: Indices, near: _Nearby, reach: int) -> Floats:
    """Standard deviation of the jitter around each candidate [k], from the median difference.

    Differences of zero (a quantised value that stayed) and the candidate's own are left out; where
    no difference is left there is no jitter: 0.
    """
    sizes = np.abs(value[changed] - value[changed - 1])
    first = np.searchsorted(changed, np.maximum(near.first, near.at - reach) + 1)
    own = np.searchsorted(changed, near.at)
    stop = np.searchsorted(changed, np.minimum(near.stop, near.at + reach))
    before = _rows(sizes, first, own)
    after = _rows(sizes, own + 1, stop)
    return _medians(np.concatenate((before, after), axis=1)) / MEDIAN_DIFFERENCE


def row_medians(value: Floats, first: Indices, stop: Indices) -> Floats:
    """Median of value[first:stop] for each pair; at least one value in each."""
    return _medians(_rows(value, first, stop))


def _rows(value: Floats, first: Indices, stop: Indices) -> Floats:
    """value[first:stop] of each pair as a row, filled up with infinity."""
    width = int(np.max(stop - first, initial=1))
    columns = first[:, None] + np.arange(width)
    inside = columns < stop[:, None]
    if inside.all():
        return np.asarray(value[columns])
    return np.where(inside, value[np.where(inside, columns, 0)], np.inf)


def _medians(rows: Floats) -> Floats:
    """Median of the finite values of each row; 0 where there is none."""
    count = np.isfinite(rows).sum(axis=1)
    ordered = _ordered(rows)
    each = np.arange(len(rows))
    middle = ordered[np.maximum(count - 1, 0) // 2, each] + ordered[count // 2, each]
    return np.where(count > 0, 0.5 * middle, 0.0)


def _ordered(rows: Floats) -> Floats:
    """The rows sorted, as columns: narrow ones by odd-even transposition, all rows at once."""
    count, width = rows.shape
    if width > NARROW or count < MANY_ROWS:
        return np.sort(rows, axis=1).T
    columns = rows.T.copy()
    for turn in range(width):
        for k in range(turn % 2, width - 1, 2):
            smaller = np.minimum(columns[k], columns[k + 1])
            np.maximum(columns[k], columns[k + 1], out=columns[k + 1])
            columns[k] = smaller
    return columns
