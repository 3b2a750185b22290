"""Runs -> bytes and back, without loss, the same bytes for the same runs."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from audit.days.runs import NO_RUNS, LoopRuns, Runs
from audit.records import Role

Numbers = NDArray[np.int64]

_VERSION = 1
_ROLES = (Role.PV, Role.SP, Role.OUTPUT, Role.MODE)
_SHIFTS = np.arange(0, 63, 7)


def encode(runs: LoopRuns) -> bytes:
    """The runs as bytes, without loss, the same bytes for the same runs.

    A version byte; for each role in fixed order the count of runs, and for each run the time since
    the end of the last one (the first: since the epoch) and its length x 4 + state; all numbers as
    variable-length integers (LEB128), the first time zigzag-coded.
    """
    numbers = []
    for role in _ROLES:
        found = runs.get(role, NO_RUNS)
        numbers += [np.array([len(found)]), _flat(found)]
    return bytes([_VERSION]) + _bytes(np.concatenate(numbers))


def _flat(runs: Runs) -> Numbers:
    """Of each run the time since the last one's end, its length x 4 + state; one after another."""
    flat = np.empty(2 * len(runs), np.int64)
    since = runs.first_us.copy()
    since[1:] -= runs.last_us[:-1]
    flat[0::2] = (since << 1) ^ (since >> 63)
    flat[1::2] = (runs.last_us - runs.first_us) * 4 + runs.state
    return flat


def decode(data: bytes) -> LoopRuns:
    """What ``encode`` was given. Raises ValueError if the bytes are not what it writes."""
    if not data or data[0] != _VERSION:
        raise ValueError("a day's runs are not in the encoding this version writes")
    numbers = _numbers(np.frombuffer(data, np.uint8)[1:])
    runs = {}
    for role in _ROLES:
        count, numbers = _split(numbers, 1)
        flat, numbers = _split(numbers, 2 * int(count[0]))
        if len(flat):
            runs[role] = _runs(flat)
    if len(numbers):
        raise ValueError("a day's runs have bytes left over")
    return runs


def _runs(flat: Numbers) -> Runs:
    since = (flat[0::2] >> 1) ^ -(flat[0::2] & 1)
    length, state = flat[1::2] >> 2, flat[1::2] & 3
    ends = np.cumsum(np.ravel((since, length), "F"))
    return Runs(ends[0::2].copy(), ends[1::2].copy(), state.astype(np.int8))


def _bytes(numbers: Numbers) -> bytes:
    """The numbers [n], none negative, by seven bits, the lowest first; all but the last + 128."""
    groups = numbers[:, np.newaxis] >> _SHIFTS
    needed = np.count_nonzero(groups, axis=1)
    needed[needed == 0] = 1
    places = np.arange(len(_SHIFTS))
    octets = (groups & 127) + 128 * (places < needed[:, np.newaxis] - 1)
    return bytes(octets[places < needed[:, np.newaxis]].astype(np.uint8))


def _numbers(octets: NDArray[np.uint8]) -> Numbers:
    if len(octets) == 0:
        return np.empty(0, np.int64)
    lasts = np.flatnonzero(octets < 128)
    if octets[-1] >= 128:
        raise ValueError("a day's runs end within a number")
    lengths = np.diff(lasts, prepend=-1)
    if lengths.max() > len(_SHIFTS):
        raise ValueError("a day's runs hold a number longer than any this version writes")
    firsts = lasts - lengths + 1
    shifts = 7 * (np.arange(len(octets)) - np.repeat(firsts, lengths))
    return np.asarray(np.add.reduceat((octets & 127).astype(np.int64) << shifts, firsts))


def _split(numbers: Numbers, count: int) -> tuple[Numbers, Numbers]:
    if len(numbers) < count:
        raise ValueError("a day's runs are cut off")
    return numbers[:count], numbers[count:]
