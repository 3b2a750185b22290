"""Record -> bytes and back: the samples a step was measured from, compact and to the last bit.

In comes a ``Record``, out goes one blob, and the other way round. Of each signal the stamps come
first: as those of the signal before it, as one step, or as differences in their greatest common
unit. Of values that mostly hold, the runs are kept. Values that are short decimals become
differences of whole numbers of their last digit, others keep their 64 bits. Numbers are laid out
byte plane by byte plane (which brings equal bytes together), planes of zeros are left out, and the
whole is packed with Zstandard (RFC 8878). Little-endian throughout.

What was stored in the first encoding is read by ``codec_first``.
"""

from __future__ import annotations

import hashlib
import struct
import threading
from collections.abc import Callable
from functools import cache
from typing import Any, NamedTuple

import numpy as np
import zstandard
from numpy.typing import NDArray

from audit.records import Record, Role, Samples
from audit.store import codec_first, codec_kernel
from audit.store.codec_kernel import (
    ALL_GOOD,
    BAD_IS_NAN,
    HELD,
    ONE_STEP,
    PLAIN_FLOATS,
    SAME_STAMPS,
)

_MAGIC = b"LC\x02"
_LEVEL = 1
_NUMBER = {Role.PV: 0, Role.SP: 1, Role.OUTPUT: 2, Role.MODE: 3}
_ROLE = {number: role for role, number in _NUMBER.items()}
_SIGNAL = struct.Struct("<BBI")
_REGULAR = struct.Struct("<qQ")
_DECIMAL = struct.Struct("<Bq")
_COUNT = struct.Struct("<I")
_NO_STAMPS = np.empty(0, "<u8")
_SCALES: NDArray[np.float64] = np.array(codec_kernel.SCALES)

Words = NDArray[np.uint64]
Floats = NDArray[np.float64]


class Packed(NamedTuple):
    """A record as a blob, and a digest of its content that no compressor's version can change."""

    data: bytes
    digest: bytes


def pack(record: Record) -> Packed:
    """The blob of a record with the digest (16 bytes) of what is in it."""
    body = _body(record)
    return Packed(_compressed(body), hashlib.blake2b(body, digest_size=16).digest())


def encode(record: Record) -> bytes:
    """The blob of a record."""
    return _compressed(_body(record))


def decode(data: bytes) -> Record:
    """The record of a blob, equal to the last bit. Raises ValueError for what is no such blob."""
    magic, packed = data[: len(_MAGIC)], data[len(_MAGIC) :]
    if magic == codec_first.MAGIC:
        return codec_first.decode(packed)
    if magic != _MAGIC:
        raise ValueError("not a stored curve")
    try:
        body = _Body(zstandard.ZstdDecompressor().decompress(packed))
        signals: dict[Role, Samples] = {}
        stamps = np.empty(0, np.int64)
        while not body.ended:
            role, samples = _take_signal(body, stamps)
            signals[role] = samples
            stamps = samples.t_us
    except (zstandard.ZstdError, struct.error, KeyError, IndexError) as error:
        raise ValueError("a stored curve is damaged") from error
    return Record({role: signals[role] for role in Role if role in signals})


class _Tools(threading.local):
    """What packing needs, kept by each thread: making it anew takes as long as packing a curve.

    ``words``, ``picks``, ``out``: room for signals of ``count`` samples.
    """

    def __init__(self) -> None:
        self.compressor = zstandard.ZstdCompressor(level=_LEVEL)
        self.count = -1

    def make_room(self, count: int) -> None:
        if count > self.count:
            self.count = count
            self.words = np.empty(count, "<u8")
            self.picks = np.empty(count, "<i8")
            self.out = np.empty(len(Role) * codec_kernel.most_octets(count), np.uint8)


_TOOLS = _Tools()


def _compressed(body: bytes) -> bytes:
    return _MAGIC + _TOOLS.compressor.compress(body)


def _body(record: Record) -> bytes:
    put_signal, tools = _kernel(), _TOOLS
    tools.make_room(max((len(samples) for samples in record.signals.values()), default=0))
    at = 0
    before = _NO_STAMPS
    for role in Role:
        samples = record.signals.get(role)
        if samples is None:
            continue
        stamps = np.ascontiguousarray(samples.t_us, "<i8").view("<u8")
        value = np.ascontiguousarray(samples.value, "<f8")
        good = np.ascontiguousarray(samples.good)
        if not len(stamps) == len(value) == len(good):
            raise ValueError("a signal needs one value and one flag a stamp")
        given = (stamps, before, value, value.view("<u8"), good)
        at = put_signal(_NUMBER[role], *given, tools.words, tools.picks, tools.out, at)
        before = stamps
    return tools.out[:at].tobytes()


@cache
def _kernel() -> Callable[..., int]:
    """``codec_kernel.put_signal``, compiled or as an earlier process left it on disk."""
    import numba
    from numba.extending import register_jitable

    for part in codec_kernel.PARTS:
        register_jitable(part)

    def read(kind: Any) -> Any:
        return numba.types.Array(kind, 1, "C", readonly=True)

    whole, octet, place = numba.uint64, numba.uint8, numba.int64
    samples = (read(whole), read(whole), read(numba.float64), read(whole), read(numba.boolean))
    signature = place(place, *samples, whole[::1], place[::1], octet[::1], place)
    compiled: Callable[..., int]
    try:
        compiled = numba.njit(signature, nogil=True, cache=True)(codec_kernel.put_signal)
    except (OSError, RuntimeError):  # no folder can be written, or the disk is full
        compiled = numba.njit(signature, nogil=True)(codec_kernel.put_signal)
    return compiled


class _Body:
    """What is left to be read of an unpacked blob."""

    def __init__(self, body: bytes) -> None:
        self._body = body
        self._place = 0

    @property
    def ended(self) -> bool:
        return self._place >= len(self._body)

    def take(self, form: struct.Struct) -> tuple[int, ...]:
        found = form.unpack_from(self._body, self._place)
        self._place += form.size
        return found

    def octets(self, count: int) -> NDArray[np.uint8]:
        if self._place + count > len(self._body):
            raise ValueError("a stored curve is damaged")
        found = np.frombuffer(self._body, np.uint8, count, self._place)
        self._place += count
        return found

    def words(self, count: int) -> Words:
        held = int(self.octets(1)[0])
        octets = np.zeros((count, 8), np.uint8)
        for k in range(8):
            if held >> k & 1:
                octets[:, k] = self.octets(count)
        return octets.reshape(-1).view("<u8")


def _take_signal(body: _Body, before: NDArray[np.int64]) -> tuple[Role, Samples]:
    number, flags, count = body.take(_SIGNAL)
    t_us = before.copy() if flags & SAME_STAMPS else _take_stamps(body, flags, count)
    good = np.ones(count, np.bool_)
    if not flags & ALL_GOOD:
        good = np.unpackbits(body.octets((count + 7) // 8), count=count).astype(np.bool_)
    held = int(good.sum()) if flags & BAD_IS_NAN else count
    value = _take_held(body, held) if flags & HELD else _take_numbers(body, held)
    if flags & BAD_IS_NAN:
        whole = np.full(count, np.nan)
        whole[good] = value
        value = whole
    if len(t_us) != count:
        raise ValueError("a stored curve is damaged")
    return _ROLE[number], Samples(t_us, value, good)


def _take_stamps(body: _Body, flags: int, count: int) -> NDArray[np.int64]:
    first, unit = body.take(_REGULAR)
    stamps = np.zeros(count, "<u8")
    if count > 1:
        steps = np.ones(count - 1, "<u8") if flags & ONE_STEP else body.words(count - 1)
        np.cumsum(steps * np.uint64(unit), dtype="<u8", out=stamps[1:])
    elif not flags & ONE_STEP:
        raise ValueError("a stored curve is damaged")
    stamps += np.array(first, "<i8").view("<u8")
    return stamps.view("<i8").astype(np.int64, copy=False)


def _take_held(body: _Body, count: int) -> Floats:
    (changes,) = body.take(_COUNT)
    starts = body.words(changes).view("<i8")
    value = _take_numbers(body, changes)
    return np.repeat(value, np.diff(starts, append=count))


def _take_numbers(body: _Body, count: int) -> Floats:
    decimals, first = body.take(_DECIMAL)
    if decimals == PLAIN_FLOATS:
        return body.words(count).view("<f8").astype(np.float64, copy=False)
    words = body.words(max(count - 1, 0))
    whole = np.full(count, first, "<i8")
    rise = (words >> np.uint64(1)).view("<i8") ^ -(words & np.uint64(1)).view("<i8")
    whole[1:] += np.cumsum(rise)
    return np.asarray(whole.astype(np.float64) / _SCALES[decimals])
