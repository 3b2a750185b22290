"""The first encoding of a record: read for what was stored in it, written no more.

Its body still says whether a stored curve is the one just cut: a digest of it stands beside every
curve that was stored in this encoding. Stamps are differences in their greatest common unit; values
that are short decimals whole numbers of their last digit, others their 64 bits; both byte plane by
byte plane, packed with zlib (RFC 1950). Little-endian throughout.
"""

from __future__ import annotations

import hashlib
import struct
import zlib
from typing import Any

import numpy as np
from numpy.typing import NDArray

from audit.records import Record, Role, Samples

MAGIC = b"LC\x01"
_NUMBER = {Role.PV: 0, Role.SP: 1, Role.OUTPUT: 2, Role.MODE: 3}
_ROLE = {number: role for role, number in _NUMBER.items()}
_HEAD = struct.Struct("<BBBIQq")
_ALL_GOOD = 1
_BAD_IS_NAN = 2
_PLAIN_FLOATS = 255
_SCALES: NDArray[np.float64] = 10.0 ** np.arange(10, dtype=np.float64)
_EXACT_BELOW = float(2**52)
_NAN_BITS = np.array(np.nan, "<f8").view("<u8")


def digest(record: Record) -> bytes:
    """The digest (16 bytes) that a record had in this encoding."""
    body = b"".join(_signal(role, record.signals[role]) for role in Role if role in record.signals)
    return hashlib.blake2b(body, digest_size=16).digest()


def decode(packed: bytes) -> Record:
    """The record of a blob without its magic bytes. Raises ValueError where it is damaged."""
    try:
        body = memoryview(zlib.decompress(packed))
        signals: dict[Role, Samples] = {}
        place = 0
        while place < len(body):
            place = _take_signal(body, place, signals)
    except (zlib.error, struct.error, KeyError) as error:
        raise ValueError("a stored curve is damaged") from error
    return Record({role: signals[role] for role in Role if role in signals})


def _signal(role: Role, samples: Samples) -> bytes:
    stamps = np.ascontiguousarray(samples.t_us, "<i8").view("<u8")
    steps = stamps[1:] - stamps[:-1]
    unit = int(np.gcd.reduce(steps)) if len(steps) else 1
    value = np.ascontiguousarray(samples.value, "<f8")
    flags = 0
    mask = b""
    if bool(samples.good.all()):
        flags = _ALL_GOOD
    else:
        mask = np.packbits(samples.good).tobytes()
        if bool((value[~samples.good].view("<u8") == _NAN_BITS).all()):
            flags = _BAD_IS_NAN
            value = value[samples.good]
    decimals, words = _whole_numbers(value)
    first = int(samples.t_us[0]) if len(stamps) else 0
    head = _HEAD.pack(_NUMBER[role], flags, decimals, len(stamps), max(unit, 1), first)
    return b"".join((head, _planes(steps // np.uint64(max(unit, 1))), mask, _planes(words)))


def _take_signal(body: memoryview, place: int, signals: dict[Role, Samples]) -> int:
    number, flags, decimals, count, unit, first = _HEAD.unpack_from(body, place)
    place += _HEAD.size
    steps, place = _from_planes(body, place, max(count - 1, 0))
    stamps = np.empty(count, "<u8")
    if count:
        stamps[0] = np.array(first, "<i8").view("<u8")
        stamps[1:] = stamps[0] + np.cumsum(steps * np.uint64(unit), dtype="<u8")
    good = np.ones(count, np.bool_)
    if not flags & _ALL_GOOD:
        length = (count + 7) // 8
        good = np.unpackbits(
            np.frombuffer(body[place : place + length], np.uint8), count=count
        ).astype(np.bool_)
        place += length
    held = int(good.sum()) if flags & _BAD_IS_NAN else count
    words, place = _from_planes(body, place, held)
    value = _values(decimals, words)
    if flags & _BAD_IS_NAN:
        whole = np.full(count, np.nan)
        whole[good] = value
        value = whole
    signals[_ROLE[number]] = Samples(
        stamps.view("<i8").astype(np.int64, copy=False), value.astype(np.float64, copy=False), good
    )
    return place


def _whole_numbers(value: NDArray[np.float64]) -> tuple[int, NDArray[np.uint64]]:
    """Number of decimals and zigzag differences; without such a number the 64 bits themselves."""
    decimals = _decimals(value)
    if decimals is None:
        return _PLAIN_FLOATS, value.view("<u8")
    whole = np.rint(value * _SCALES[decimals]).astype("<i8")
    rise = whole.copy()
    rise[1:] -= whole[:-1]
    return decimals, ((rise << 1) ^ (rise >> 63)).view("<u8")


def _values(decimals: int, words: NDArray[np.uint64]) -> NDArray[np.float64]:
    if decimals == _PLAIN_FLOATS:
        return words.view("<f8")
    rise = (words >> np.uint64(1)).view("<i8") ^ -(words & np.uint64(1)).view("<i8")
    whole: NDArray[np.float64] = np.cumsum(rise).astype("<f8")
    return whole / float(_SCALES[decimals])


def _decimals(value: NDArray[np.float64]) -> int | None:
    """The fewest decimals with which every value is regained exactly; None where none is."""
    if len(value) == 0:
        return 0
    most = float(np.abs(value).max())  # NaN or infinite where one value is
    if not most < _EXACT_BELOW or bool(np.signbit(value[value == 0]).any()):
        return None
    possible = _SCALES[_SCALES * most < _EXACT_BELOW, np.newaxis]
    likely = _regained(value[:16], possible)  # a few values rule out most of the scales
    for decimals in np.flatnonzero(likely):
        if bool(_regained(value, possible[decimals])):
            return int(decimals)
    return None


def _regained(value: NDArray[np.float64], scale: NDArray[np.float64]) -> NDArray[np.bool_]:
    """For each scale, whether rounding to it loses nothing."""
    regained: NDArray[np.bool_] = (np.rint(value * scale) / scale == value).all(axis=-1)
    return regained


def _planes(words: NDArray[np.uint64]) -> bytes:
    """All lowest bytes, then all second bytes, and so on."""
    octets = np.ascontiguousarray(words, "<u8").view(np.uint8).reshape(-1, 8)
    return octets.T.tobytes()


def _from_planes(body: memoryview, place: int, count: int) -> tuple[NDArray[Any], int]:
    end = place + 8 * count
    if end > len(body):
        raise ValueError("a stored curve is damaged")
    planes = np.frombuffer(body[place:end], np.uint8).reshape(8, count)
    return np.ascontiguousarray(planes.T).reshape(-1).view("<u8"), end
