"""Time stamps of an export come in, UTC microseconds go out, each with what became of it.

Formats: ISO 8601 in the profile of RFC 3339 (``T`` or blank between, ``Z`` or an offset, or none
for the source's zone; seconds and fractions optional, the basic form too); epoch numbers with
fractions; strptime patterns. Fractions are rounded to the microsecond, half to even. A leap second
(23:59:60) is refused: UTC microseconds without leap seconds have no place for it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from decimal import Decimal
from enum import IntEnum
from fractions import Fraction
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from audit.exports import zones
from audit.records import SECOND_US, ExportSource

_FIRST = datetime(1970, 1, 1, tzinfo=UTC)
_LAST_US = int((datetime(2200, 1, 1, tzinfo=UTC) - _FIRST).total_seconds()) * SECOND_US
_EPOCH_FROM_US = 365 * 86_400 * SECOND_US
_EPOCH_DIGITS = {"epoch_s": 6, "epoch_ms": 3, "epoch_us": 0, "epoch_ns": -3}

_DAY = r"(19[7-9]\d|20\d\d|21\d\d)-(0[1-9]|1[0-2])-(0[1-9]|[12]\d|3[01])"
_TIME = r"[T ]([01]\d|2[0-3]):[0-5]\d(:[0-5]\d(\.\d{1,9})?)?"
_LOCAL = f"^{_DAY}({_TIME})?$"
_OFFSET = f"^{_DAY}{_TIME}(Z|[+-]([01]\\d|2[0-3])(:?[0-5]\\d)?)$"
_ISO = re.compile(
    r"(\d{4})(-?)(\d\d)\2(\d\d)"
    r"(?:[Tt ](\d\d)(?::?(\d\d)(?::?(\d\d)(?:[.,](\d+))?)?)?\s*"
    r"(?:([Zz])|([+-])(\d\d)(?::?(\d\d))?)?)?",
    re.ASCII,
)
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,2})?", re.ASCII)


class Told(IntEnum):
    """What became of a stamp."""

    FINE = 0
    BAD = 1
    LOCAL = 2
    REPEATED = 3
    MISSING = 4


@dataclass(frozen=True, eq=False)
class Stamps:
    """Stamps [n] in microseconds, UTC where ``told`` is FINE; wall clock where it is LOCAL."""

    us: NDArray[np.int64]
    told: NDArray[np.int8]


@dataclass(frozen=True, eq=False)
class RowsSoFar:
    """Where a piece of a file stands: rows before it, the order of wall stamps up to it, and that
    of the whole file where it was read before."""

    first_row: int
    order: zones.Order
    known: zones.Order | None


def stamps(
    column: Any,
    source: ExportSource,
    groups: NDArray[np.int64] | None = None,
    so_far: RowsSoFar | None = None,
) -> Stamps:
    """UTC of a time column (an Arrow array of any type), as the source declares it.

    ``groups`` [n]: which rows stand in the order they were recorded in (default: all); by that
    order the repeated hour of an autumn clock change is told apart where it can be. ``so_far``: the
    column is a piece of a file; None: it is the whole of it. A stamp before 1970 or from 2200 on is
    BAD, and so is an epoch number of 1970: today's numbers fall there when they are read in too
    small a unit. Raises ValueError for a time_format that cannot be followed.
    """
    read = _bounded(_typed(column, source))
    local = np.flatnonzero(read.told == Told.LOCAL)
    if len(local) == 0:
        return read
    group = np.zeros(len(local), np.int64) if groups is None else groups[local]
    return _bounded(_settled(read, local, ZoneInfo(source.timezone), group, so_far))


def _settled(
    read: Stamps,
    local: NDArray[np.int64],
    zone: ZoneInfo,
    group: NDArray[np.int64],
    so_far: RowsSoFar | None,
) -> Stamps:
    us, told = read.us.copy(), read.told.copy()
    wall = us[local]
    walls = zones.placed(wall, zone)
    us[local], told[local] = walls.earlier, Told.FINE
    told[local[walls.missing]] = Told.MISSING
    order = zones.Order() if so_far is None else so_far.order
    row = local if so_far is None else local + so_far.first_row
    order.follow(walls, wall, group, row)
    if walls.repeated.any():
        known = order if so_far is None else so_far.known
        certain, second = (walls.missing, walls.missing)
        if known is not None:
            certain, second = known.told(walls, group, row)
        us[local[second]] = walls.later[second]
        told[local[walls.repeated & ~certain]] = Told.REPEATED
    return Stamps(us, told)


def _bounded(read: Stamps) -> Stamps:
    outside = ((read.us < 0) | (read.us >= _LAST_US)) & (read.told == Told.FINE)
    # a wall clock is at most a day away from UTC: far walls cannot be FINE, near ones come again
    far = ((read.us < -86_400 * SECOND_US) | (read.us > _LAST_US)) & (read.told == Told.LOCAL)
    if not (outside | far).any():
        return read
    return Stamps(read.us, np.where(outside | far, np.int8(Told.BAD), read.told))


def _typed(column: Any, source: ExportSource) -> Stamps:
    """By the column's Arrow type: true time stamps are taken as such, all else as declared."""
    kind = column.type
    if pa.types.is_dictionary(kind):
        return _coded(column, source)
    if pa.types.is_timestamp(kind):
        return _native(column, kind.unit, kind.tz is not None)
    if pa.types.is_date(kind):
        return _native(pc.cast(column, pa.timestamp("us")), "us", aware=False)
    if pa.types.is_floating(kind) and source.time_format in _EPOCH_DIGITS:
        return _of_this_unit(_floats(column, _EPOCH_DIGITS[source.time_format]))
    kinds = (pa.types.is_string, pa.types.is_large_string, pa.types.is_integer, pa.types.is_decimal)
    if not any(is_kind(kind) for is_kind in kinds):
        return _nothing(len(column))
    return _texts(pc.cast(column, pa.string()), source)


def _coded(column: Any, source: ExportSource) -> Stamps:
    """Each different stamp is read once."""
    read = _typed(column.dictionary, source)
    indices = pc.cast(column.indices, pa.int64())
    code = pc.fill_null(indices, -1).to_numpy(zero_copy_only=False)
    return Stamps(np.append(read.us, 0)[code], np.append(read.told, np.int8(Told.BAD))[code])


def _texts(column: Any, source: ExportSource) -> Stamps:
    if source.time_format == "iso8601":
        return _iso(column)
    if source.time_format not in _EPOCH_DIGITS:
        return _pattern(column, source.time_format)
    if source.decimal != ".":
        column = pc.replace_substring(column, source.decimal, ".")
    return _of_this_unit(_epoch(column, _EPOCH_DIGITS[source.time_format]))


def _of_this_unit(read: Stamps) -> Stamps:
    """Epoch numbers without those that only a wrong unit can have brought into 1970."""
    early = (read.us < _EPOCH_FROM_US) & (read.told == Told.FINE)
    return Stamps(read.us, np.where(early, np.int8(Told.BAD), read.told))


def _nothing(count: int) -> Stamps:
    return Stamps(np.zeros(count, np.int64), np.full(count, Told.BAD, np.int8))


def _native(column: Any, unit: str, aware: bool) -> Stamps:
    """Arrow time stamps in s, ms, us or ns; with a zone they are UTC, without one wall clock."""
    whole = pc.fill_null(pc.cast(column, pa.int64()), np.iinfo(np.int64).min).to_numpy(
        zero_copy_only=False
    )
    known = column.is_valid().to_numpy(zero_copy_only=False)
    if unit == "ns":
        us = _half_even(whole)
    else:
        factor = {"s": SECOND_US, "ms": 1000, "us": 1}[unit]
        known &= np.abs(whole // 2) < 2 * (_LAST_US // factor)
        us = np.where(known, whole, 0) * factor
    told = Told.FINE if aware else Told.LOCAL
    return Stamps(np.where(known, us, 0), np.where(known, np.int8(told), np.int8(Told.BAD)))


def _half_even(ns: NDArray[np.int64]) -> NDArray[np.int64]:
    us: NDArray[np.int64] = ns // 1000
    rest = ns - us * 1000
    us += (rest > 500) | ((rest == 500) & (us % 2 == 1))
    return us


def _iso(column: Any) -> Stamps:
    """ISO 8601 texts: the common forms as arrays, what is left of them one by one."""
    for aware in (True, False):
        # the first texts alone before all of them: a cast that fails is slow
        whole = None if _parsed(column.slice(0, 8), aware) is None else _parsed(column, aware)
        if whole is not None:
            return _native(whole, "ns", aware)
    with_offset = pc.match_substring_regex(column, _OFFSET)
    without = pc.match_substring_regex(column, _LOCAL)
    read = _nothing(len(column))
    for mask, aware in ((with_offset, True), (without, False)):
        part = pc.if_else(mask, column, pa.scalar(None, column.type))
        parsed = _parsed(part, aware)
        if parsed is not None:
            found = _native(parsed, "ns", aware)
            read = _joined(read, found)
    return _joined(read, _one_by_one(column, read, _iso_text))


def _parsed(column: Any, aware: bool) -> Any | None:
    """The column as time stamps, or None where one of its texts is none of this kind."""
    try:
        return pc.cast(column, pa.timestamp("ns", tz="UTC" if aware else None))
    except pa.ArrowInvalid:
        return None


def _joined(read: Stamps, more: Stamps) -> Stamps:
    bad = read.told == Told.BAD
    return Stamps(np.where(bad, more.us, read.us), np.where(bad, more.told, read.told))


def _one_by_one(column: Any, read: Stamps, parse: Any) -> Stamps:
    """Texts that are BAD so far, each different one once, through ``parse``."""
    left = np.flatnonzero(read.told == Told.BAD)
    texts = column.take(pa.array(left)).to_pylist()
    known = {text: parse(text.strip()) for text in set(texts) if text is not None}
    known[None] = (0, Told.BAD)
    us, told = np.zeros(len(column), np.int64), np.full(len(column), Told.BAD, np.int8)
    us[left] = [known[text][0] for text in texts]
    told[left] = [known[text][1] for text in texts]
    return Stamps(us, told)


def _iso_text(text: str) -> tuple[int, Told]:
    match = _ISO.fullmatch(text)
    if match is None:
        return 0, Told.BAD
    year, _, month, day, hour, minute, second, fraction, zulu, sign, off_h, off_m = match.groups()
    try:
        at = datetime(int(year), int(month), int(day), int(hour or 0), tzinfo=UTC)
        at = at.replace(minute=int(minute or 0), second=int(second or 0))
    except ValueError:
        return 0, Told.BAD
    us = (at - _FIRST) // timedelta(microseconds=1)
    us += round(Fraction(int(fraction or 0), 10 ** len(fraction or "")) * SECOND_US)
    if zulu:
        return us, Told.FINE
    if sign is None:
        return us, Told.LOCAL
    if int(off_h) > 23 or int(off_m or 0) > 59:
        return 0, Told.BAD
    offset = (int(off_h) * 60 + int(off_m or 0)) * 60 * SECOND_US
    return us - (offset if sign == "+" else -offset), Told.FINE


def _epoch(column: Any, digits: int) -> Stamps:
    """Epoch numbers as texts; ``digits`` behind the point give a microsecond."""
    try:
        return _decimals(pc.cast(column, pa.decimal128(38, 15)), digits)
    except pa.ArrowInvalid:
        plain = pc.match_substring_regex(column, r"^[+-]?\d{1,20}(\.\d{1,15})?$")
        part = pc.if_else(plain, column, pa.scalar(None, column.type))
        read = _decimals(pc.cast(part, pa.decimal128(38, 15)), digits)
        return _joined(read, _one_by_one(column, read, lambda text: _epoch_text(text, digits)))


def _decimals(column: Any, digits: int) -> Stamps:
    """Rounded half to even at ``digits``; 128-bit decimals hold the microseconds exactly."""
    known = column.is_valid().to_numpy(zero_copy_only=False)
    within = pc.less(pc.abs(column), pa.scalar(Decimal(_LAST_US).scaleb(1 - digits)))
    known &= pc.fill_null(within, False).to_numpy(zero_copy_only=False)
    held = pc.if_else(pa.array(known), column, pa.scalar(Decimal(0), column.type))
    scale = max(digits, 0)
    rounded = pc.cast(pc.round(held, digits, "half_to_even"), pa.decimal128(38, scale))
    whole = np.frombuffer(rounded.buffers()[1], "<i8")[2 * rounded.offset :: 2][: len(rounded)]
    us = whole // 1000 if digits < 0 else whole
    told = np.where(known, np.int8(Told.FINE), np.int8(Told.BAD))
    return Stamps(us.astype(np.int64), told)


def _epoch_text(text: str, digits: int) -> tuple[int, Told]:
    if _NUMBER.fullmatch(text) is None:
        return 0, Told.BAD
    us = round(Fraction(text) * Fraction(10) ** digits)
    return (us, Told.FINE) if 0 <= us < _LAST_US else (0, Told.BAD)


def _floats(column: Any, digits: int) -> Stamps:
    value = pc.cast(column, pa.float64()).to_numpy(zero_copy_only=False)
    known = np.isfinite(value) & (np.abs(value) < 2.0 * _LAST_US * 10.0**-digits)
    value = np.where(known, value, 0.0)
    whole = np.floor(value)
    if digits < 0:
        us = _half_even(whole.astype(np.int64))
    else:
        us = whole.astype(np.int64) * 10**digits
        us = us + np.rint((value - whole) * 10**digits).astype(np.int64)
    return Stamps(us, np.where(known, np.int8(Told.FINE), np.int8(Told.BAD)))


def _pattern(column: Any, pattern: str) -> Stamps:
    """A strptime pattern; with ``%z`` in it the stamps are instants, else wall clock."""
    if "%" not in pattern or "%Z" in pattern:
        raise ValueError(f"{pattern!r} is no strptime pattern with offsets, if any, as %z")
    import pandas as pd  # a large library that few sites' stamps need

    aware = "%z" in pattern
    texts = pd.Series(column.to_pylist(), dtype=object).str.strip()
    parsed = pd.to_datetime(texts, format=pattern, errors="coerce", utc=aware)
    read = pa.Array.from_pandas(parsed)
    return _native(read, read.type.unit, aware)
