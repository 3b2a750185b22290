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
from typing import NamedTuple

import numpy as np
import zstandard
from numpy.typing import NDArray

from audit.records import Record, Role, Samples
from audit.store import codec_first

_MAGIC = b"LC\x02"
_LEVEL = 1
_NUMBER = {Role.PV: 0, Role.SP: 1, Role.OUTPUT: 2, Role.MODE: 3}
_ROLE = {number: role for role, number in _NUMBER.items()}
_SIGNAL = struct.Struct("<BBI")
_REGULAR = struct.Struct("<qQ")
_DECIMAL = struct.Struct("<Bq")
_COUNT = struct.Struct("<I")
_PLANES = struct.Struct("<B")
_ALL_GOOD = 1
_BAD_IS_NAN = 2
_SAME_STAMPS = 4
_ONE_STEP = 8
_HELD = 16
_PLAIN_FLOATS = 255
_RUNS_PART = 16
"""Values of which at most one in so many differs from the one before are kept as runs."""
_FEW = 16
_EXACT_BELOW = 2.0**52
_SMALL_BELOW = 2.0**29
_SCALES: NDArray[np.float64] = 10.0 ** np.arange(10, dtype=np.float64)
_NAN_BITS = np.array(np.nan, "<f8").view("<u8")

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


class _Compressor(threading.local):
    """One a thread: making one costs as much as packing a curve."""

    def __init__(self) -> None:
        self.made = zstandard.ZstdCompressor(level=_LEVEL)


_COMPRESSOR = _Compressor()


def _compressed(body: bytes) -> bytes:
    return _MAGIC + _COMPRESSOR.made.compress(body)


def _body(record: Record) -> bytes:
    parts: list[bytes] = []
    before: NDArray[np.int64] | None = None
    for role in Role:
        if role in record.signals:
            samples = record.signals[role]
            _put_signal(parts, role, samples, before)
            before = samples.t_us
    return b"".join(parts)


def _put_signal(
    parts: list[bytes], role: Role, samples: Samples, before: NDArray[np.int64] | None
) -> None:
    """Head, stamps, which are good, values."""
    value = np.ascontiguousarray(samples.value, "<f8")
    flags, stamps = _stamps(samples.t_us, before)
    mask = b""
    if samples.good.all():
        flags |= _ALL_GOOD
    else:
        mask = np.packbits(samples.good).tobytes()
        if (value[~samples.good].view("<u8") == _NAN_BITS).all():
            flags |= _BAD_IS_NAN
            value = value[samples.good]
    runs = _runs(value)
    if runs is not None:
        flags |= _HELD
        value = value[runs]
    parts += (_SIGNAL.pack(_NUMBER[role], flags, len(samples)), *stamps, mask)
    if runs is not None:
        parts += (_COUNT.pack(len(runs)), *_planes(runs.astype("<u8")))
    parts += _numbers(value)


def _stamps(
    stamps: NDArray[np.int64], before: NDArray[np.int64] | None
) -> tuple[int, tuple[bytes, ...]]:
    """How stamps are kept, and these bytes."""
    if before is not None and np.array_equal(stamps, before):
        return _SAME_STAMPS, ()
    words = np.ascontiguousarray(stamps, "<i8").view("<u8")
    first = int(stamps[0]) if len(stamps) else 0
    steps = words[1:] - words[:-1]
    if len(steps) == 0 or (steps == steps[0]).all():
        return _ONE_STEP, (_REGULAR.pack(first, int(steps[0]) if len(steps) else 0),)
    unit = int(np.gcd.reduce(steps))
    return 0, (_REGULAR.pack(first, unit), *_planes(steps // np.uint64(unit)))


def _runs(value: Floats) -> NDArray[np.int64] | None:
    """Where the values change, the first place included; None where they do so often."""
    bits = value.view("<u8")
    other = bits[1:] != bits[:-1]
    if len(bits) == 0 or _RUNS_PART * np.count_nonzero(other) > len(bits):
        return None
    return np.concatenate(([0], np.flatnonzero(other) + 1))


def _numbers(value: Floats) -> tuple[bytes, ...]:
    """Number of decimals, the first whole number, and zigzag differences; else the 64 bits."""
    found = _whole_numbers(value)
    if found is None:
        return (_DECIMAL.pack(_PLAIN_FLOATS, 0), *_planes(value.view("<u8")))
    decimals, whole = found
    rise = whole[1:] - whole[:-1]
    words = (rise << 1) ^ (rise >> (8 * rise.itemsize - 1))
    unsigned: NDArray[np.unsignedinteger] = words.view(f"<u{words.itemsize}")
    return (_DECIMAL.pack(decimals, int(whole[0])), *_planes(unsigned))


def _whole_numbers(value: Floats) -> tuple[int, NDArray[np.signedinteger]] | None:
    """The fewest decimals with which every value is regained to the bit, and the whole numbers of
    the last of them; None where there are none, or too few values to look.
    """
    if len(value) <= _FEW:
        return None
    low, high = float(value.min()), float(value.max())
    most = max(-low, high)  # NaN or infinite where one value is
    if not most < _EXACT_BELOW or (low <= 0.0 <= high and np.signbit(value[value == 0.0]).any()):
        return None  # minus zero is not regained from a whole number
    possible = _SCALES[: int(np.searchsorted(_SCALES, _EXACT_BELOW / max(most, 1.0)))]
    few = value[:_FEW]  # rules out most of the scales
    likely = (np.rint(few * possible[:, np.newaxis]) / possible[:, np.newaxis] == few).all(axis=1)
    for decimals in np.flatnonzero(likely).tolist():
        scale = possible[decimals]
        whole = value * scale
        np.rint(whole, out=whole)
        if (whole / scale == value).all():
            small = scale * most < _SMALL_BELOW
            return decimals, whole.astype("<i4" if small else "<i8")
    return None


def _planes(words: NDArray[np.unsignedinteger]) -> tuple[bytes, ...]:
    """Which byte planes are not all zero, as bits; and these planes, the lowest first."""
    some = int(np.bitwise_or.reduce(words, initial=0))
    if some < 1 << 8:
        return (b"\x01", words.astype("<u1").tobytes()) if some else (b"\x00",)
    held = [k for k in range(words.itemsize) if some >> (8 * k) & 0xFF]
    narrow = np.ascontiguousarray(words if some >> 16 else words.astype("<u2"))
    octets = narrow.view("<u1").reshape(-1, narrow.itemsize)
    return (_PLANES.pack(sum(1 << k for k in held)), *(octets[:, k].tobytes() for k in held))


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
    t_us = before.copy() if flags & _SAME_STAMPS else _take_stamps(body, flags, count)
    good = np.ones(count, np.bool_)
    if not flags & _ALL_GOOD:
        good = np.unpackbits(body.octets((count + 7) // 8), count=count).astype(np.bool_)
    held = int(good.sum()) if flags & _BAD_IS_NAN else count
    value = _take_held(body, held) if flags & _HELD else _take_numbers(body, held)
    if flags & _BAD_IS_NAN:
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
        steps = np.ones(count - 1, "<u8") if flags & _ONE_STEP else body.words(count - 1)
        np.cumsum(steps * np.uint64(unit), dtype="<u8", out=stamps[1:])
    elif not flags & _ONE_STEP:
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
    if decimals == _PLAIN_FLOATS:
        return body.words(count).view("<f8").astype(np.float64, copy=False)
    words = body.words(max(count - 1, 0))
    whole = np.full(count, first, "<i8")
    rise = (words >> np.uint64(1)).view("<i8") ^ -(words & np.uint64(1)).view("<i8")
    whole[1:] += np.cumsum(rise)
    return np.asarray(whole.astype(np.float64) / _SCALES[decimals])
