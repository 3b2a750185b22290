"""Runs -> bytes and back, without loss, the same bytes for the same runs."""

from __future__ import annotations

import numpy as np

from audit.days.runs import LoopRuns, Runs
from audit.records import Role

_VERSION = 1


_ROLES = (Role.PV, Role.SP, Role.OUTPUT, Role.MODE)


def encode(runs: LoopRuns) -> bytes:
    """The runs as bytes, without loss, the same bytes for the same runs.

    A version byte; for each role in fixed order the count of runs, and for each run the time since
    the end of the last one (the first: since the epoch) and its length x 4 + state; all numbers as
    variable-length integers (LEB128), the first time zigzag-coded.
    """
    out = bytearray([_VERSION])
    for role in _ROLES:
        found = runs.get(role)
        _put(out, 0 if found is None else len(found))
        if found is None:
            continue
        end = 0
        for first, last, state in zip(
            found.first_us.tolist(), found.last_us.tolist(), found.state.tolist(), strict=True
        ):
            since = first - end
            _put(out, 2 * since if since >= 0 else -2 * since - 1)
            _put(out, (last - first) * 4 + state)
            end = last
    return bytes(out)


def decode(data: bytes) -> LoopRuns:
    """What ``encode`` was given. Raises ValueError if the bytes are not what it writes."""
    if not data or data[0] != _VERSION:
        raise ValueError("a day's runs are not in the encoding this version writes")
    numbers = _numbers(data[1:])
    runs = {}
    for role in _ROLES:
        count, numbers = _split(numbers, 1)
        flat, numbers = _split(numbers, 2 * count[0])
        rows = []
        end = 0
        for since, length in zip(flat[::2], flat[1::2], strict=True):
            first = end + (since // 2 if since % 2 == 0 else -(since + 1) // 2)
            end = first + length // 4
            rows.append((first, end, length % 4))
        if rows:
            first_us, last_us, state = np.array(rows, np.int64).T
            runs[role] = Runs(first_us, last_us, state.astype(np.int8))
    if numbers:
        raise ValueError("a day's runs have bytes left over")
    return runs


def _put(out: bytearray, number: int) -> None:
    while number >= 128:
        out.append(number % 128 + 128)
        number //= 128
    out.append(number)


def _numbers(data: bytes) -> list[int]:
    found = []
    number, shift = 0, 0
    for byte in data:
        number += (byte % 128) << shift
        shift += 7
        if byte < 128:
            found.append(number)
            number, shift = 0, 0
    if shift:
        raise ValueError("a day's runs end within a number")
    return found


def _split(numbers: list[int], count: int) -> tuple[list[int], list[int]]:
    if len(numbers) < count:
        raise ValueError("a day's runs are cut off")
    return numbers[:count], numbers[count:]
