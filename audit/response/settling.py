"""Settling: the crossing into a band around the final level after which the response stays.

It stays if it is inside for at least as long again as it took to get there, and for ten samples; a
later exit is no part of it. In: the smoothed path, the band, draws of what is uncertain. Out: when
it settled, or the time it is known to take longer than. Monte Carlo as in JCGM 101, because the
settling time jumps where an extremum just touches the band.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.response.constants import CONSTANTS
from audit.response.localfit import Array
from audit.response.shape import Path


@dataclass(frozen=True)
class Settled:
    """Coarse settling: entry, s, and the end of the stay, s; None: not settled by the end."""

    entry_s: float | None
    until_s: float


def coarse(t: Array, x: Array, band: float, end_s: float) -> Settled:
    """First stay inside 1 +- band that lasts as long again as it took and for ten samples."""
    inside = np.abs(x - 1.0) <= band
    flank = np.diff(np.concatenate([[0], inside.astype(np.int8), [0]]))
    first = np.flatnonzero(flank == 1)
    last = np.flatnonzero(flank == -1)
    for start, stop in zip(first[:50], last[:50], strict=True):
        entry = max(float(t[start]), 0.0)
        final = stop == len(t)
        until = end_s if final else float(t[stop - 1])
        if until - entry >= entry and stop - start >= CONSTANTS.dwell_samples:
            return Settled(entry, until)
    return Settled(None, end_s)


@dataclass(frozen=True, eq=False)
class Draws:
    """Deviations [draws] of the two levels in parts of the change, and of each turn [k, draws].

    The first draw is the nominal one: all deviations 0.
    """

    y0: Array
    y_end: Array
    turns: Array
    crossing: Array
    stamp: Array


def draw(path: Path, u0: float, u1: float, stamp_u: float, seed: int) -> Draws:
    """Draw the deviations; column 0 is zero."""
    rng = np.random.default_rng(seed)
    count = CONSTANTS.draws + 1
    k = len(path.turns)
    normal = rng.standard_normal((3 + 2 * k, count))
    normal[:, 0] = 0.0
    turns = path.turn_sd[:, None] * normal[3 : 3 + k]
    crossing = CONSTANTS.crossing_sd * path.sd * normal[3 + k :]
    return Draws(u0 * normal[0], u1 * normal[1], turns, crossing, stamp_u * normal[2])


def settle(
    path: Path, draws: Draws, band: float, end_s: float, dwell_s: float
) -> tuple[Array, NDArray[np.bool_], NDArray[np.int64]]:
    """For each draw the settling time, s, whether it is known (if not: longer than that), and in
    which swing of the response it lies.

    ``end_s``: end of the window; ``dwell_s``: ten samples. Extremes that cannot reach out of the
    band in any draw are passed over.
    """
    size = 1.0 + draws.y_end - draws.y0
    knots = _knots(path, band, draws)
    at_knot = path.turn_x[knots]
    off = (at_knot[:, None] + draws.turns[knots] - draws.y0) / size - 1.0
    entry = np.full(len(size), np.nan)
    result = np.full(len(size), np.nan)
    swing = np.zeros(len(size), np.int64)
    for j in range(len(knots) - 1):
        here, there = off[j], off[j + 1]
        lo, hi = int(path.turns[knots[j]]), int(path.turns[knots[j + 1]])
        t, x = path.t[lo : hi + 1], path.x[lo : hi + 1]
        rising = bool(at_knot[j + 1] >= at_knot[j])
        outside = np.abs(here) > band
        goes = np.abs(there) > band
        across = outside & goes & (np.sign(here) != np.sign(there))
        side = np.where(outside, np.sign(here), -np.sign(there))
        into = _when(t, x, rising, (1.0 + side * band) * size + draws.y0 + draws.crossing[j])
        enters = outside & (~goes | across)
        entry = np.where(enters, into, np.where(outside, np.nan, entry))
        swing = np.where(enters & np.isnan(result), j, swing)
        if j == 0:
            entry = np.where(~outside, 0.0, entry)
        level = (1.0 + np.sign(there) * band) * size + draws.y0 + draws.crossing[j]
        leaves = _when(t, x, rising, level)
        stayed = goes & (leaves - entry >= np.maximum(entry, dwell_s))
        result = np.where(np.isnan(result) & stayed, entry, result)
        entry = np.where(goes, np.nan, entry)
    stays = end_s - entry >= np.maximum(entry, dwell_s)
    known = ~np.isnan(result) | stays
    open_end = np.where(np.isnan(entry), end_s, entry)
    value = np.where(np.isnan(result), open_end, result)
    return np.maximum(value + draws.stamp, 0.0), known, swing


def _knots(path: Path, band: float, draws: Draws) -> NDArray[np.int64]:
    """Turning points that can lie outside the band, and both ends."""
    reach = 4.0 * (path.turn_sd + float(np.abs(draws.y_end).max()) + float(np.abs(draws.y0).max()))
    out = np.abs(path.turn_x - 1.0) > band - reach
    last = int(np.flatnonzero(out)[-1]) if bool(out.any()) else 0
    return np.unique(np.concatenate([np.arange(last + 1), [len(path.turns) - 1]]))


def _when(t: Array, x: Array, rising: bool, level: Array) -> Array:
    """When a stretch that runs one way reaches a level, s; its ends beyond its range."""
    order = np.maximum.accumulate(x) if rising else np.maximum.accumulate(-x)
    found: Array = np.interp(level if rising else -level, order, t)
    return found
