"""A signal's samples -> its bytes in a curve's body. For numba to compile.

The functions below are Python that numba turns to machine code at first use: a night stores
thousands of curves, and packing them by array operations takes longer than all else about storing
them. The layout is told in ``codec``. Little-endian; stamps and bits are unsigned, their sums
modulo 2**64.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

ALL_GOOD = 1
BAD_IS_NAN = 2
SAME_STAMPS = 4
ONE_STEP = 8
HELD = 16
PLAIN_FLOATS = 255
RUNS_PART = 16
"""Values of which at most one in so many differs from the one before are kept as runs."""
FEW = 16
"""So many values or fewer are not looked at for decimals."""
EXACT_BELOW = 2.0**52
NAN_BITS = np.uint64(0x7FF8000000000000)
SCALES = tuple(10.0**decimals for decimals in range(10))
_BLOCK = 64
_OCTET = np.uint64(255)
_NONE = np.uint64(0)

Octets = NDArray[np.uint8]
Words = NDArray[np.uint64]
Picks = NDArray[np.int64]
Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


def most_octets(count: int) -> int:
    """How many bytes a signal of so many samples takes at most."""
    return 64 + 25 * count


def put_signal(
    number: int,
    stamps: Words,
    before: Words,
    value: Floats,
    bits: Words,
    good: Flags,
    words: Words,
    picks: Picks,
    out: Octets,
    at: int,
) -> int:
    """Writes one signal into ``out`` from ``at`` on; returns where it ends.

    ``stamps`` [n]; ``before``: those of the signal before, none for the first. ``value`` [n] and
    its ``bits`` [n]; which are ``good`` [n]. ``words`` and ``picks``: room for n numbers each.
    """
    count = len(stamps)
    out[at] = number
    flags_at = at + 1
    at = _put_number(np.uint64(count), 4, out, at + 2)
    flags = 0
    if count > 0 and _same(stamps, before):
        flags |= SAME_STAMPS
    else:
        end = _put_stamps(stamps, words, out, at)
        flags |= ONE_STEP if end == at + 16 else 0
        at = end
    if _all(good):
        flags |= ALL_GOOD
        kept = _pick_all(count, picks)
    else:
        kept = _pick_good(good, bits, picks)
        flags |= BAD_IS_NAN if kept < count else 0
        at = _put_mask(good, out, at)
    end = _put_runs(bits, picks, kept, words, out, at)
    if end > at:
        flags |= HELD
        kept = _pick_firsts(bits, picks, kept)
    out[flags_at] = flags
    return _put_values(value, bits, picks, kept, words, out, end)


def _same(one: Words, other: Words) -> bool:
    if len(one) != len(other):
        return False
    equal = True
    for k in range(len(one)):
        equal &= one[k] == other[k]
    return equal


def _all(flags: Flags) -> bool:
    every = True
    for k in range(len(flags)):
        every &= flags[k]
    return every


def _put_number(number: np.uint64, octets: int, out: Octets, at: int) -> int:
    for k in range(octets):
        out[at + k] = (number >> np.uint64(8 * k)) & _OCTET
    return at + octets


def _put_planes(words: Words, count: int, out: Octets, at: int) -> int:
    """Which byte planes are not all zero, as bits; and these planes, the lowest first."""
    some = _NONE
    for k in range(count):
        some |= words[k]
    held_at = at
    held = 0
    at += 1
    for plane in range(8):
        shift = np.uint64(8 * plane)
        if (some >> shift) & _OCTET != _NONE:
            held |= 1 << plane
            for k in range(count):
                out[at + k] = (words[k] >> shift) & _OCTET
            at += count
    out[held_at] = held
    return at


def _put_stamps(stamps: Words, words: Words, out: Octets, at: int) -> int:
    """The first stamp, and the step or the unit; of unequal steps their multiples of the unit."""
    steps = len(stamps) - 1
    at = _put_number(stamps[0] if steps >= 0 else _NONE, 8, out, at)
    unit = stamps[1] - stamps[0] if steps > 0 else _NONE
    equal = True
    for k in range(steps):
        words[k] = stamps[k + 1] - stamps[k]
        equal &= words[k] == unit
    if equal:
        return _put_number(unit, 8, out, at)
    for k in range(steps):
        unit = _common(words[k], unit)
    at = _put_number(unit, 8, out, at)
    for k in range(steps):
        words[k] //= unit
    return _put_planes(words, steps, out, at)


def _common(one: np.uint64, other: np.uint64) -> np.uint64:
    """Greatest common divisor (Euclid)."""
    while other != _NONE:
        one, other = other, one % other
    return one


def _put_mask(good: Flags, out: Octets, at: int) -> int:
    """One bit a sample, the highest first."""
    octets = (len(good) + 7) // 8
    out[at : at + octets] = 0
    for k in range(len(good)):
        if good[k]:
            out[at + k // 8] |= 128 >> (k % 8)
    return at + octets


def _pick_good(good: Flags, bits: Words, picks: Picks) -> int:
    """Places of the good samples; of all, if one that is not good has a value of its own."""
    kept = 0
    for k in range(len(good)):
        picks[kept] = k
        kept += good[k]
        if not good[k] and bits[k] != NAN_BITS:
            return _pick_all(len(good), picks)
    return kept


def _pick_all(count: int, picks: Picks) -> int:
    for k in range(count):
        picks[k] = k
    return count


def _put_runs(bits: Words, picks: Picks, count: int, words: Words, out: Octets, at: int) -> int:
    """How many runs of one value, and where they begin; nothing where the values do not hold."""
    runs = min(count, 1)
    for k in range(1, count):
        runs += bits[picks[k]] != bits[picks[k - 1]]
    if count == 0 or RUNS_PART * (runs - 1) > count:
        return at
    at = _put_number(np.uint64(runs), 4, out, at)
    words[0] = _NONE
    found = 1
    for k in range(1, count):
        if bits[picks[k]] != bits[picks[k - 1]]:
            words[found] = k
            found += 1
    return _put_planes(words, runs, out, at)


def _pick_firsts(bits: Words, picks: Picks, count: int) -> int:
    """Of the places only the first of each run."""
    kept = 1
    last = bits[picks[0]]
    for k in range(1, count):
        if bits[picks[k]] != last:
            last = bits[picks[k]]
            picks[kept] = picks[k]
            kept += 1
    return kept


def _put_values(
    value: Floats, bits: Words, picks: Picks, count: int, words: Words, out: Octets, at: int
) -> int:
    """Number of decimals, the first whole number, and zigzag differences; else the 64 bits."""
    decimals = _decimals(value, bits, picks, count)
    if decimals < 0:
        out[at] = PLAIN_FLOATS
        at = _put_number(_NONE, 8, out, at + 1)
        for k in range(count):
            words[k] = bits[picks[k]]
        return _put_planes(words, count, out, at)
    scale = SCALES[decimals]
    out[at] = decimals
    last = np.int64(np.rint(value[picks[0]] * scale))
    at = _put_number(np.uint64(last), 8, out, at + 1)
    for k in range(1, count):
        whole = np.int64(np.rint(value[picks[k]] * scale))
        rise = whole - last
        words[k - 1] = np.uint64((rise << 1) ^ (rise >> 63))
        last = whole
    return _put_planes(words, count - 1, out, at)


def _decimals(value: Floats, bits: Words, picks: Picks, count: int) -> int:
    """The fewest decimals with which every value is regained to the bit; -1: none, or few values.

    Minus zero is not regained from a whole number.
    """
    if count <= FEW:
        return -1
    most = 0.0
    for k in range(count):
        size = abs(value[picks[k]])
        if not size < EXACT_BELOW or (size == 0.0 and bits[picks[k]] != _NONE):
            return -1
        most = max(most, size)
    for decimals in range(len(SCALES)):
        if not SCALES[decimals] * max(most, 1.0) < EXACT_BELOW:
            return -1
        if _regained(value, picks, count, SCALES[decimals]):
            return decimals
    return -1


def _regained(value: Floats, picks: Picks, count: int, scale: float) -> bool:
    for first in range(0, count, _BLOCK):
        lost = 0
        for k in range(first, min(first + _BLOCK, count)):
            one = value[picks[k]]
            lost += np.rint(one * scale) / scale != one
        if lost > 0:
            return False
    return True


PARTS = (
    *(
        _same,
        _all,
        _put_number,
        _put_planes,
        _put_stamps,
        _common,
        _put_mask,
        _pick_all,
        _pick_good,
    ),
    *(_put_runs, _pick_firsts, _regained, _decimals, _put_values),
)
"""What ``put_signal`` calls."""
