"""What an archive did to a signal: exception reporting, swinging doors, or nothing to be seen.

In: the samples around one change. Out: ``Archive``, how it thinned them out and how far the signal
may be from what it kept. Nothing outside the interval is looked at.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum
from math import comb

import numpy as np
from numpy.typing import NDArray

from audit.response.constants import CONSTANTS
from audit.response.order import Array, differences, median, quantile

ALIKE = 1e-9
"""Values closer than this part of the change are one value."""
LEAST = 8
"""Intervals below which nothing is told from."""


class Kept(StrEnum):
    """How the samples came to be the ones kept; ``FEW``: too few to tell, and not regular."""

    EVERY = "every"
    FEW = "few"
    EXCEPTION = "exception"
    SWINGING = "swinging"


@dataclass(frozen=True)
class Archive:
    """``deadband``: estimated; ``low``..``high``: its 95 % interval, in the unit of the values.

    Of exception reporting what a value may change unreported; of swinging doors how far each door
    hangs from the kept sample, and the line between kept samples is within twice of it.
    ``hidden``: what the uncertainty is taken from, where the kind is not sure the larger one.
    """

    kept: Kept = Kept.EVERY
    deadband: float = 0.0
    low: float = 0.0
    high: float = 0.0
    hidden: float = 0.0

    @property
    def recognised(self) -> bool:
        return self.kept in (Kept.EXCEPTION, Kept.SWINGING)


EVERY = Archive()


def recognise(t: Array, v: Array, window_s: float) -> Archive:
    """How the samples ``v`` [n], parts of the change, at ``t`` [n] s from t0, were kept.

    ``window_s``: nothing else was kept up to there.

    The absolute deadband of OPC UA Part 4 and the swinging door of Bristol (US patent 4669097)
    leave traces that no loss or jitter leaves; those are what is looked for.
    """
    length = differences(t)
    if len(length) < 2:
        return EVERY
    middle = median(length)
    if float(np.mean(np.abs(length - middle) < 0.05 * middle)) > CONSTANTS.regular_share:
        return EVERY
    chance = _clustered(t, v, window_s)
    found = None
    if len(length) >= LEAST - 1:
        found = _exception(length, np.abs(differences(v)), chance)
        found = found or _swinging(t, v, length, chance)
    return found or _few(t, v, length) or _untold(t, v)


def _bends(t: Array, v: Array) -> Array:
    """Each sample's distance from the line between its neighbours."""
    share = (t[1:-1] - t[:-2]) / (t[2:] - t[:-2])
    bend: Array = v[1:-1] - (1.0 - share) * v[:-2] - share * v[2:]
    return bend


def _few(t: Array, v: Array, length: Array) -> Archive | None:
    """So few and uneven that the signal may be as far off as a sample is from its neighbours."""
    if len(t) >= CONSTANTS.few_uneven or float(length.min()) > 0.7 * float(length.max()):
        return None
    off = quantile(np.abs(_bends(t, v)), 0.8)
    return Archive(Kept.FEW, off, 0.0, off, off)


def _untold(t: Array, v: Array) -> Archive:
    """Irregular without an archive's traces: no deadband, or one within how the samples bend."""
    bends = np.abs(_bends(t, v))
    return Archive(high=quantile(bends, 0.8)) if len(bends) else EVERY


def scan_s(t: Array) -> float:
    """The scan that irregular stamps [n] s come from: all intervals are multiples of it.

    The least interval, or half or a third of it. 0 where there is none to see.
    """
    length = differences(t)
    if len(length) < LEAST:
        return 0.0
    least = float(length.min())
    if len(length) > 50 and float(np.mean(length < 1.05 * least)) < CONSTANTS.scan_share:
        return 0.0
    for part in (1.0, 2.0, 3.0):
        parts = length * (part / least)
        if float(np.mean(np.abs(parts - np.round(parts)) < 0.05)) > 0.95:
            return least / part
    return 0.0


def _exception(length: Array, hop: Array, chance: float) -> Archive | None:
    """Exception reporting: no reported hop is below the deadband, but after the longest silence.

    ``length``, ``hop`` [n]: intervals, s, and absolute changes over them. The longest silence is
    the longest interval, or where a gap is longer that of the least hops. ``chance``: logarithm of
    that of samples lying as they do.
    """
    for told, silent in _told(length, hop):
        found = _edge(np.sort(hop[told]), hop[silent], chance)
        if found is not None:
            return found
    return None


def _told(length: Array, hop: Array) -> Iterator[tuple[NDArray[np.bool_], NDArray[np.bool_]]]:
    """Which changes were reported for their size and which after the longest silence: two ways.

    A longest silence that is not the longest interval is that of the least changes, and then most
    changes are reported ones.
    """
    low = hop < 0.5 * median(hop)
    longest = float(length.max())
    told = length < 0.9 * longest
    yield told, ~told
    if bool(low.any()):
        longest = float(length[low].min())
        told = length < 0.9 * longest
        if 2 * int(told.sum()) >= len(hop):
            yield told, ~told & (length < 1.1 * longest)


def _edge(hop: Array, silent: Array, chance: float) -> Archive | None:
    """A sharp lower edge of the told hops, sorted [n], that hops after a silence stay below.

    Changes of a signal of which nothing is left out have a density that does not rise from zero
    on, so that each share of them sets a least share below the edge. Told by chance in less than
    one of ``edge_chance`` such records (Chernoff's bound; ranks of the silent ones).
    """
    count = len(hop)
    few = int(CONSTANTS.edge_strays * count)
    if count < 6 or hop[few] <= ALIKE:
        return None
    edge = float(hop[few])
    sharp = CONSTANTS.edge_sharp if count >= 50 else CONSTANTS.edge_sharp_few
    if edge < sharp * float(hop[int(0.2 * count)]):
        return None
    share = np.arange(few + 1, count + 1) / count
    expected = min(float(np.max(edge / hop[few:] * share)), 1.0 - 1e-12)
    own = -count * _apart(few / count, expected)
    below = int((silent <= edge).sum())
    if below >= max(len(silent) - 1, 1):
        nth = np.arange(1, below + 1)
        own += float(np.sum(np.log(nth / (count + nth))))
    if own > np.log(CONSTANTS.edge_chance_least) or own + chance > np.log(CONSTANTS.edge_chance):
        return None
    near = min(few + 5, count - 1)
    spacing = float(hop[near] - edge) / max(near - few, 1)
    deadband = max(edge - spacing, 0.7 * edge)
    low = max(edge - 3.7 * spacing, 0.5 * edge)
    return Archive(Kept.EXCEPTION, deadband, low, edge, edge)


def _apart(seen: float, expected: float) -> float:
    """Chernoff's exponent for a share seen at most where another is expected; 0 if it is more."""
    if seen >= expected:
        return 0.0
    rest = (1.0 - seen) * float(np.log((1.0 - seen) / (1.0 - expected)))
    return rest + (seen * float(np.log(seen / expected)) if seen > 0 else 0.0)


def _swinging(t: Array, v: Array, length: Array, chance: float) -> Archive | None:
    """Swinging doors: few bends that are nearly none, or long straight lines between bends.

    The deadband from the median distance of a kept sample from the line between its neighbours:
    5.8 times the door's reach for a smooth bow (closed form: chords of 2.41 sqrt(2 reach / bend)),
    about once to twice in noise, when the bends go to and fro (own simulations).
    """
    bend = _bends(t, v)
    size = np.sort(np.abs(bend))
    typical = median(size)
    if typical <= ALIKE:
        return None
    scan = scan_s(t)
    kept = scan * len(length) / float(t[-1] - t[0]) if scan > 0 else 0.0
    dense, thinned = _few_small(size), _thinned(length, kept)
    if dense and kept > 0.3:
        times = float(np.interp(kept, (0.37, 0.62, 0.68, 0.82), (2.1, 3.25, 3.7, 5.7)))
    elif dense or thinned or chance < np.log(CONSTANTS.cluster_chance):
        at = (0.3, 0.4, 0.5, 0.6, 0.7, 0.8)
        swaying = float(np.mean(bend[1:] * bend[:-1] < 0))
        bow = 4.6 if scan > 0 else 5.5
        times = float(np.interp(swaying, at, (bow, 2.8, 1.8, 1.2, 0.95, 0.85)))
    else:
        return None
    deadband = typical / times
    doubt = CONSTANTS.door_doubt if len(size) >= CONSTANTS.few_kept else CONSTANTS.door_doubt_few
    low, high = deadband / doubt, deadband * doubt
    hidden = deadband
    if not dense:
        hidden = max(deadband, _least_told(length, np.abs(differences(v))))
    return Archive(Kept.SWINGING, deadband, low, max(high, hidden), hidden)


def _least_told(length: Array, hop: Array) -> float:
    """What an exception deadband would be: the least change that was not due to silence."""
    return max(
        (float(hop[told].min()) for told, _ in _told(length, hop) if told.any()), default=0.0
    )


def _few_small(size: Array) -> bool:
    """Bends, sorted [n], nearly all larger than noise of which nothing is left out would give."""
    few = int(0.1 * len(size))
    share = np.arange(few + 1, len(size) + 1) / len(size)
    expected = min(float(np.max(size[few] / np.maximum(size[few:], ALIKE) * share)), 1.0 - 1e-12)
    return bool(-len(size) * _apart(few / len(size), expected) < np.log(CONSTANTS.edge_chance))


def _thinned(length: Array, kept: float) -> bool:
    """Few of the scans kept, after silences of very different lengths.

    So would be a record of which nearly nine in ten were lost at random.
    """
    if not CONSTANTS.thinned_least < kept < CONSTANTS.thinned_share:
        return False
    spread = quantile(length, 0.9) / quantile(length, 0.1)
    return spread > CONSTANTS.thinned_spread


def _clustered(t: Array, v: Array, window_s: float) -> float:
    """Logarithm of the chance that so many of few samples lie in the transient (binomial tail).

    The longest silence, which may be a gap, is left out. 0 where they do not lie far denser there.
    """
    away = np.flatnonzero((t > 0) & (np.abs(v - v[-1]) > CONSTANTS.away_share))
    if len(t) > CONSTANTS.few_kept or len(away) == 0:
        return 0.0
    until = float(t[min(int(away[-1]) + 1, len(t) - 1)])
    edges = np.append(t, max(window_s, float(t[-1])))
    length = differences(edges)
    at = int(np.argmax(length))
    inside = (edges[1:] > 0) & (edges[1:] <= until)
    inside[at] = False
    count = len(length) - 1
    share = float(np.sum(length[inside])) / float(length.sum() - length[at])
    least = int(inside.sum())
    if share >= 1.0 or least < CONSTANTS.cluster_ratio * share * count:
        return 0.0
    part = comb(count, least) * share**least * (1.0 - share) ** (count - least)
    tail = part
    for k in range(least, count):
        part *= (count - k) / (k + 1) * share / (1.0 - share)
        tail += part
        if part < 1e-3 * tail:
            break
    return float(np.log(tail))
